"""Prices with Greeks and sensitivities against prices alone."""

from __future__ import annotations

from collections.abc import Iterable

import gmpy2
import numpy as np

from engine import price_greeks, price_smiles
from engine.greeks import GreekSlice
from engine.models.heston import Heston
from engine.slices import Slice
from engine.transform import plan_cache
from tests.bench.inputs import FORWARD, PARAMETERS, TOLERANCE, fang_oosterlee, smile
from tests.bench.table import Table, error, ratio, seconds
from tests.bench.timing import Stopwatch
from tests.reference.mp_models import reference_model
from tests.reference.mp_prices import otm_value, sensitivity

TITLE = "delta, gamma and five sensitivities against prices alone"
CHECKED = (
    1,
    35,
    48,
    65,
    99,
)  # of 101 strikes, none at the kink of the forward: held against derivatives of 25-digit values


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Time from nothing; errors of the sensitivities and of delta against differences of high precision."""
    model = fang_oosterlee()
    year, batch = [smile(model, 1.0, 101, width=5.0)], [smile(model, t, 101) for t in np.linspace(0.25, 3.0, 12)]
    table = Table(
        f"101 strikes an expiry over +-5 standard deviations, tolerance {TOLERANCE:g}, from nothing",
        ("", "time", "of prices alone", "goal", "sensitivity error", "delta error"),
        notes=[
            "prices alone: with implied volatilities, as the other rows; every call forgets what an earlier one kept",
            f"errors: worst of {len(CHECKED)} strikes of one year against differences of 25-digit values, over the "
            "largest of each kind",
        ],
    )
    for name, slices in (("one year", year), ("12 expiries", batch)):
        _rows(watch, table, name, model, slices)
    yield table


def _rows(watch: Stopwatch, table: Table, name: str, model: Heston, slices: list[Slice]) -> None:
    def prices() -> object:
        plan_cache.clear()
        return price_smiles(model, slices, tolerance=TOLERANCE)

    def greeks(sensitivities: bool) -> object:
        plan_cache.clear()
        return price_greeks(model, slices, greeks=("delta", "gamma"), sensitivities=sensitivities, tolerance=TOLERANCE)

    times = watch.together({"prices": prices, "greeks": lambda: greeks(False), "all": lambda: greeks(True)})
    alone = times["prices"].best
    table.add(f"{name}: prices", seconds(alone), ratio(alone, alone), "", "", "")
    table.add(f"{name}: delta, gamma", seconds(times["greeks"].best), ratio(times["greeks"].best, alone), "", "", "")
    shown = ["", ""]
    if len(slices) == 1:
        names = list(PARAMETERS)[:1] if watch.quick else list(PARAMETERS)
        shown = [error(e) for e in _errors(slices[0], greeks(True)[0], CHECKED[:1] if watch.quick else CHECKED, names)]
    table.add(
        f"{name}: and sensitivities", seconds(times["all"].best), ratio(times["all"].best, alone), "<= 4 x", *shown
    )


def _errors(one: Slice, found: GreekSlice, at: tuple[int, ...], names: list[str]) -> tuple[float, float]:
    """Worst gap to the differences, over the largest number of its kind on the smile."""
    worst = 0.0
    for name in names:
        scale = np.max(np.abs(found.sensitivities[name]))
        for i in at:
            k = gmpy2.log(gmpy2.mpfr(one.strikes[i], 120) / FORWARD)
            exact = FORWARD * float(sensitivity(lambda x, k=k, name=name: _value(k, name, x), PARAMETERS[name]))
            worst = max(worst, abs(found.sensitivities[name][i] - exact) / scale)
    return worst, max(abs(found.greeks["delta"][i] - _delta(one, i)) for i in at)


def _value(k: object, name: str, x: object) -> object:
    return otm_value(reference_model("heston", {**PARAMETERS, name: x}), 1.0, k, digits=25)


def _delta(one: Slice, i: int) -> float:
    """``dV/dF`` of ``V = F c(ln K/F)`` out of the money."""

    def price(forward: object) -> object:
        return forward * otm_value(reference_model("heston", PARAMETERS), 1.0, gmpy2.log(one.strikes[i] / forward))

    return float(sensitivity(price, FORWARD))
