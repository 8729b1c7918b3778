"""Black's formula and its inverse against 50-digit arithmetic, over the double range.

The reference is the textbook formula in mpmath with more extra digits than its two terms cancel, and Newton's method
on it; nothing of the engine enters. The condition number of ``s`` in the value is ``|d ln s / d ln value|``, but at
least one: no double is closer than its own rounding.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import mpmath as mp
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from engine.black import log_otm_value, otm_value, total_deviation
from engine.status import Status

EPS = float(np.finfo(np.float64).eps)
DIGITS = 50
SMALLEST = mp.mpf("1e-290")


@dataclass(frozen=True, slots=True)
class Exact:
    """Value, and its elasticities in ``s`` and in ``k`` (absolute), with 50 digits."""

    value: Any
    in_s: Any
    in_k: Any


def _exact(k: Any, s: Any) -> Exact:
    """Call for ``k >= 0``, put for ``k < 0``, per unit forward; ``Phi`` by ``erfc``."""
    a = abs(k)
    lost = float(mp.log10((1 + a / s) / min(s, mp.mpf(1))))  # digits that the terms share; erfc has all of its own
    with mp.workdps(DIGITS + 15 + int(lost)):
        root = mp.sqrt(2)
        upper = mp.erfc((a / s - s / 2) / root) / 2
        lower = mp.exp(a) * mp.erfc((a / s + s / 2) / root) / 2
        scale = mp.exp(min(k, mp.mpf(0)))
        c = upper - lower
        in_k = a * (lower if k >= 0 else upper) / c  # d(call)/dk = -e^k Phi(d2), d(put)/dk = e^k Phi(-d2)
        found = Exact(c * scale, s * mp.npdf(a / s - s / 2) / c, in_k)
    with mp.workdps(DIGITS):
        return Exact(+found.value, +found.in_s, +found.in_k)


def _exact_inverse(k: float, value: float, near: float) -> tuple[Any, float]:
    """The exact ``s`` of the doubles ``k`` and ``value``, by Newton from ``near``, and the condition number."""
    with mp.workdps(DIGITS):
        k_, s, target = mp.mpf(k), mp.mpf(near), mp.mpf(value)
        for _ in range(8):
            at = _exact(k_, s)
            step = s * (target / at.value - 1) / at.in_s
            s += step
            if abs(step) < abs(s) * mp.mpf(10) ** -22:  # converges quadratically: the next one has twice the digits
                return s, max(1.0, float(1 / at.in_s))
    raise AssertionError(f"no inverse for k={k!r}, value={value!r}")


def _units(found: float, exact: Any) -> float:
    """Relative error in rounding units."""
    return float(abs(mp.mpf(float(found)) - exact) / abs(exact)) / EPS


def _grid() -> list[tuple[float, float]]:
    """Total deviations 1e-6 to 10, ``|k| / s`` from 0 to 37, both sides, and points around every join of methods."""
    deviations = [*np.logspace(-6, 1, 15), 0.15, 0.35, 0.7, 0.95, 1.0, 1.05, 1.3, 2.2, 5.0]
    places = [0.0, 1e-9, 1e-4, 0.03, 0.1, 0.3, 0.5, 0.7, 1.0, 1.5, 2.0, 3.0, 5.0, 8.0, 13.0, 20.0, 28.0, 33.0, 36.0]
    points = [(place * s, s) for s in deviations for place in places]
    points += [(a, s) for a in (0.999, 1.001, 3.99, 4.01) for s in (0.03, 0.2, 0.9, 1.5, 3.0, 8.0)]
    return [(sign * float(a), float(s)) for a, s in points for sign in (1.0, -1.0) if sign > 0.0 or a > 0.0]


def _in_range(points: list[tuple[float, float]]) -> list[tuple[float, float, Exact]]:
    exact = [(k, s, _exact(mp.mpf(k), mp.mpf(s))) for k, s in points]
    return [
        (k, s, e) for k, s, e in exact if e.value > SMALLEST and float(e.value) < math.exp(min(k, 0.0)) * (1.0 - EPS)
    ]


@pytest.fixture(scope="module")
def points() -> list[tuple[float, float, Exact]]:
    return _in_range(_grid())


def test_grid_reaches_the_corners(points):
    """The grid is not empty where it matters."""
    values = [float(e.value) for _, _, e in points]
    assert len(points) > 700
    assert min(values) < 1e-280 and min(s for _, s, _ in points) == 1e-6 and max(s for _, s, _ in points) == 10.0


def test_value_to_a_few_units(points):
    """4 rounding units times ``1 + |d ln v / d ln s| + |d ln v / d ln k|``."""
    k, s, exact = map(list, zip(*points, strict=True))
    found = otm_value(k, s)
    worst = max(_units(v, e.value) / (1.0 + float(e.in_s + e.in_k)) for v, e in zip(found, exact, strict=True))
    assert worst <= 4.0


def test_logarithm_of_the_value(points):
    """The same in absolute terms, plus the rounding of the logarithm itself; and where the value underflows."""
    k, s, exact = map(list, zip(*points, strict=True))
    for found, e in zip(log_otm_value(k, s), exact, strict=True):
        log_v = mp.log(e.value)
        allowed = 4.0 * EPS * (1.0 + float(e.in_s + e.in_k) + abs(float(log_v)))
        assert abs(mp.mpf(float(found)) - log_v) <= allowed
    for k_, s_ in ((0.1, 0.001), (-3.0, 0.02), (2.0, 0.004), (-800.0, 15.0)):
        log_v = mp.log(_exact(mp.mpf(k_), mp.mpf(s_)).value)
        assert float(log_otm_value(k_, s_)) == pytest.approx(float(log_v), rel=8 * EPS)


def test_inverse_over_the_grid(points):
    """16 rounding units times the condition number."""
    k = np.array([k for k, _, _ in points])
    value = np.array([float(e.value) for _, _, e in points])
    found = total_deviation(k, value)
    assert np.all(found.statuses == Status.OK)
    worst = 0.0
    for (k_, s, _), v, deviation in zip(points, value, found.deviations, strict=True):
        exact, condition = _exact_inverse(k_, float(v), s)
        worst = max(worst, _units(deviation, exact) / condition)
    assert worst <= 16.0


@settings(max_examples=500)
@given(
    log_s=st.floats(math.log(1e-6), math.log(10.0)),
    place=st.floats(0.0, 6.1).map(lambda root: root * root),
    sign=st.sampled_from([1.0, -1.0]),
)
def test_drawn_round_trip(log_s, place, sign):
    """Drawn over total deviations 1e-6 to 10 and prices down to 1e-290: value and inverse within their bounds."""
    s = math.exp(log_s)
    k = sign * place * s
    exact = _exact(mp.mpf(k), mp.mpf(s))
    value = float(exact.value)
    assume(value > 1e-290 and value < math.exp(min(k, 0.0)) * (1.0 - EPS))
    assert _units(float(otm_value(k, s)), exact.value) <= 4.0 * (1.0 + float(exact.in_s + exact.in_k))
    found = total_deviation(np.array([k]), np.array([value]))
    assert found.statuses[0] == Status.OK
    inverse, condition = _exact_inverse(k, value, s)
    assert _units(found.deviations[0], inverse) <= 16.0 * condition


@settings(max_examples=500)
@given(
    k=st.floats(-12.0, 12.0),
    log_part=st.floats(math.log(1e-280), -1e-9),
)
def test_drawn_prices(k, log_part):
    """Drawn by price instead: any fraction of the upper bound, down to 1e-290."""
    value = math.exp(log_part) * math.exp(min(k, 0.0))
    assume(value > 1e-290)
    found = total_deviation(np.array([k]), np.array([value]))
    assert found.statuses[0] == Status.OK
    inverse, condition = _exact_inverse(k, value, float(found.deviations[0]))
    assert _units(found.deviations[0], inverse) <= 16.0 * condition
