"""Implied volatilities of a million quotes and of fifty, against a root finder in a loop; evaluations and accuracy."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager

import mpmath as mp
import numpy as np
from scipy.optimize import brentq

from engine.black import implied_vols, inversion, otm_value, total_deviation
from engine.status import Payoff
from tests.bench.table import Table, count, error, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "implied volatilities against a loop of brentq"
MARKETS = {
    "a month to two years, 5 to 80 %": (0.02, 1.1, 1.0),
    "the same, far wings": (0.02, 1.1, 3.0),
    "total deviation 1e-6 to 10": (1e-6, 10.0, 3.0),
}
LOOP = 1000  # quotes the loop is timed on; its time is per quote


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Time per quote of a vector and of one short smile; the error is the largest over 300 quotes, in rounding units
    times the condition number, against 50 digits."""
    sizes = (50, 1000) if watch.quick else (50, 1000, 1_000_000)
    table = Table(
        "Implied volatilities, one call",
        (
            "quotes",
            "n",
            "call",
            "per quote",
            "inversion",
            "brentq",
            "of per quote",
            "evaluations",
            "most",
            "error",
            "brentq's",
        ),
        notes=[
            "call: implied_vols from out-of-the-money prices; inversion: per quote, from k and value alone",
            f"brentq: a loop of scipy.optimize.brentq on math.erfc, per quote, timed on {LOOP:,} of the same quotes",
            "evaluations: of Black's formula, mean and most per quote, counted",
            "error: largest of 300 quotes against 50 digits, in rounding units times the condition number",
        ],
    )
    for name, (least, most, width) in MARKETS.items():
        for n in sizes:
            table.add(name, *_row(watch, n, least, most, width))
    yield table


def _row(watch: Stopwatch, n: int, least: float, most: float, width: float) -> tuple[str, ...]:
    k, s, value = _quotes(n, least, most, width)
    few = np.linspace(0, n - 1, min(n, LOOP)).astype(int)
    columns = {
        "strikes": 100.0 * np.exp(k),
        "forward": 100.0,
        "discount_factor": 0.97,
        "expiry": 1.0,
        "payoffs": Payoff.OTM,
    }
    price = 97.0 * value
    times = watch.together(
        {
            "call": lambda: implied_vols(price, **columns),
            "inversion": lambda: total_deviation(k, value),
            "loop": lambda: _loop(k[few], value[few]),
        }
    )
    call, inverse = times["call"].best / n, times["inversion"].best / n
    loop = times["loop"].best / few.shape[0]
    found = total_deviation(k, value).deviations
    spent = _evaluations(k[few], value[few])
    some = few[:: max(1, few.shape[0] // 300)]
    errors = _errors(k[some], value[some], s[some], {"call": found[some], "loop": _loop(k[some], value[some])})
    return (
        count(n),
        seconds(times["call"].best),
        seconds(call),
        seconds(inverse),
        seconds(loop),
        ratio(loop, call),
        f"{spent.mean():.2f}",
        str(spent.max()),
        f"{errors['call']:.1f}",
        error(errors["loop"]),
    )


def _quotes(n: int, least: float, most: float, width: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """``k``, ``s`` and values that are normal doubles under their bound; ``k / s`` normal with deviation ``width``."""
    rng = np.random.default_rng(20261203)
    k, s = np.empty(0), np.empty(0)
    while k.shape[0] < n:
        more = np.exp(rng.uniform(math.log(least), math.log(most), n))
        at = more * rng.normal(0.0, width, n)
        value = otm_value(at, more)
        good = (value > 1e-290) & (value < np.exp(np.minimum(at, 0.0)) * (1.0 - 1e-9))
        k, s = np.append(k, at[good])[:n], np.append(s, more[good])[:n]
    return k, s, otm_value(k, s)


def _loop(k: np.ndarray, value: np.ndarray) -> np.ndarray:
    """The usual loop: the textbook formula on the error function of the standard library, a bracketed root."""
    found = np.empty(k.shape)
    for i, (one, target) in enumerate(zip(k.tolist(), value.tolist(), strict=True)):
        try:
            found[i] = brentq(_excess(one, target), 1e-7, 20.0, xtol=1e-15, rtol=8.9e-16)
        except ValueError:  # the formula has lost all digits and shows no change of sign
            found[i] = math.nan
    return found


def _excess(k: float, target: float) -> Callable[[float], float]:
    strike, sign, root = math.exp(k), 1.0 if k >= 0.0 else -1.0, math.sqrt(0.5)

    def excess(s: float) -> float:
        d1 = -k / s + 0.5 * s
        upper = 0.5 * math.erfc(-sign * d1 * root)
        return sign * (upper - strike * 0.5 * math.erfc(-sign * (d1 - s) * root)) - target

    return excess


@contextmanager
def _counting(calls: list[int]) -> Iterator[None]:
    """Count where Mills' ratios are taken; the solver's own code runs unchanged."""
    names = ("difference", "difference_near", "total")
    plain = {name: getattr(inversion, name) for name in names}
    try:
        for name in names:
            setattr(inversion, name, _counted(plain[name], calls))
        yield
    finally:
        for name in names:
            setattr(inversion, name, plain[name])


def _counted(plain: Callable[..., np.ndarray], calls: list[int]) -> Callable[..., np.ndarray]:
    def counted(*columns: np.ndarray) -> np.ndarray:
        calls.append(columns[0].shape[0])
        return plain(*columns)

    return counted


def _evaluations(k: np.ndarray, value: np.ndarray) -> np.ndarray:
    """Evaluations of each quote: one call a quote."""
    out = np.empty(k.shape[0], dtype=int)
    calls: list[int] = []
    with _counting(calls):
        for i in range(k.shape[0]):
            calls.clear()
            total_deviation(k[i], value[i])
            out[i] = sum(calls)
    return out


def _errors(k: np.ndarray, value: np.ndarray, s: np.ndarray, found: dict[str, np.ndarray]) -> dict[str, float]:
    """Largest relative error over its condition number, in rounding units; quotes without an answer are left out."""
    worst = dict.fromkeys(found, 0.0)
    with mp.workdps(75):
        for i in range(k.shape[0]):
            exact, condition = _inverse(mp.mpf(float(k[i])), mp.mpf(float(value[i])), mp.mpf(float(s[i])))
            for name, column in found.items():
                if math.isfinite(column[i]):
                    units = float(abs(mp.mpf(float(column[i])) / exact - 1)) / 2.0**-52
                    worst[name] = max(worst[name], units / condition)
    return worst


def _inverse(k: mp.mpf, value: mp.mpf, s: mp.mpf) -> tuple[mp.mpf, float]:
    a, scale, root = abs(k), mp.exp(min(k, 0)), mp.sqrt(2)
    for _ in range(4):
        c = (mp.erfc((a / s - s / 2) / root) - mp.exp(a) * mp.erfc((a / s + s / 2) / root)) / 2
        elasticity = s * mp.npdf(a / s - s / 2) / c
        s += s * (value / (scale * c) - 1) / elasticity
    return s, max(1.0, float(1 / elasticity))
