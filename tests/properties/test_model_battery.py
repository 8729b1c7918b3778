"""What every model of the engine must be, checked from outside over its whole box. No model is left out.

The exact laws: ``phi(0) = phi(-i) = 1``, ``|phi| <= 1`` and ``phi(-u) = conj phi(u)`` on the real line, the strip
inside the true one, the envelope above ``|phi|`` and falling. And the multiple-precision twin of ``tests.reference``:
the logarithm within the rounding cap it states, moments, mean variance.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import gmpy2
import numpy as np
import pytest

from engine import MODELS
from tests.properties.parameter_sets import DIMENSIONS, expiry, pair, twins
from tests.reference.mp_models import reference_model
from tests.reference.mp_prices import log_moments, moment_strip

EPS = float(np.finfo(np.float64).eps)
QUICK_SETS, SETS = 6, 24  # drawn sets per model in the fast suite, and in all
CASES = [
    pytest.param(name, seed, marks=() if seed < QUICK_SETS else pytest.mark.long, id=f"{name}-{seed}")
    for name in MODELS
    for seed in range(SETS)
]
each_case = pytest.mark.parametrize(("name", "seed"), CASES)


class Case:
    """One parameter set and expiry: the model (floats), its twin, and the scale ``s`` of its density."""

    def __init__(self, name: str, seed: int) -> None:
        u = np.random.default_rng([seed, len(name)]).random(DIMENSIONS[name] + 1)
        self.model, self.twin = pair(name, [float(x) for x in u[:-1]])
        self.tau = expiry(float(u[-1]), low=1.0 / 8760.0, high=50.0)
        self.s = math.sqrt(float(np.reshape(self.model.mean_variance(self.tau), -1)[0]))
        if self.s == 0.0:
            pytest.skip("no randomness in this set: it is priced in closed form")
        self.low, self.high = (float(np.reshape(edge, -1)[0]) for edge in self.model.strip(self.tau))

    def orders(self, count: int) -> np.ndarray:
        """Moment orders in the strip: in [0, 1], and to either side as far as 95 % of the way to the edge, 30 / s, and
        moments of exp(300) allow."""
        right, left = (min(30.0 / self.s, 0.95 * room) for room in (self.high - 1.0, -self.low))
        while not float(np.ravel(self.model.log_moment(np.array([1.0 + right]), self.tau))[0]) < 300.0:
            right *= 0.7
        while not float(np.ravel(self.model.log_moment(np.array([-left]), self.tau))[0]) < 300.0:
            left *= 0.7
        outward = np.geomspace(1e-2, 1.0, count)
        return np.concatenate([-left * outward, np.linspace(0.05, 0.95, count), 1.0 + right * outward])


def test_every_model_has_sets_and_a_twin() -> None:
    for name in MODELS:
        pair(name, [0.5] * DIMENSIONS[name])[0].check()


@each_case
def test_one_at_zero_and_at_minus_i(name: str, seed: int) -> None:
    case = Case(name, seed)
    value, size = case.model.log_cf_sized(np.array([0.0, -1j]), case.tau)
    assert np.all(np.abs(value) <= EPS * size)
    assert np.all(np.abs(case.model.log_moment(np.array([0.0, 1.0]), case.tau)) <= EPS * size)


@each_case
def test_modulus_and_symmetry_on_the_real_line(name: str, seed: int) -> None:
    case = Case(name, seed)
    u = np.geomspace(1e-3, 1e4, 400) / case.s
    value, size = case.model.log_cf_sized(u + 0j, case.tau)
    assert np.all(value.real <= EPS * size)
    mirrored, _ = case.model.log_cf_sized(-u + 0j, case.tau)
    assert np.all(np.abs(mirrored - np.conj(value)) <= 2.0 * EPS * size)


@each_case
def test_no_branch_jump_along_u(name: str, seed: int) -> None:
    """Wherever neighbours differ most, the difference goes to nothing as they are drawn together."""
    case = Case(name, seed)
    for p in case.orders(2):
        u = np.concatenate([[0.0], np.geomspace(1e-2, 1e3, 300) / case.s])
        value = case.model.log_cf(u - 1j * p, case.tau)
        change = np.abs(np.diff(value)) / (1.0 + np.abs(value[1:]))
        for j in np.argsort(change)[-3:]:
            low, high = u[j], u[j + 1]
            for _ in range(60):
                middle = 0.5 * (low + high)
                ends = case.model.log_cf(np.array([low, middle, high]) - 1j * p, case.tau)
                low, high = (low, middle) if abs(ends[1] - ends[0]) > abs(ends[2] - ends[1]) else (middle, high)
            first, last = case.model.log_cf_sized(np.array([low, high]) - 1j * p, case.tau)[0]
            assert abs(last - first) <= 1e-9 * (1.0 + abs(first)), (case.model, case.tau, p, low)


@each_case
def test_strip_is_inside_the_true_one(name: str, seed: int) -> None:
    case = Case(name, seed)
    exact_low, exact_high = moment_strip(case.twin, case.tau)
    hard = 1.0 - abs(getattr(case.model, "rho", 0.0)) < 1e-6  # there the edge hangs on the last digits of rho
    for precise, accuracy in ((False, 2e-3), (True, 1e-7 if hard else 1e-12)):
        low, high = (float(np.reshape(edge, -1)[0]) for edge in case.model.strip(case.tau, precise=precise))
        for found, exact, beyond in ((-low, -exact_low, 0), (high, exact_high, 1)):
            if math.isinf(found):
                assert float(exact) > 1e12, (case.model, case.tau)
                continue
            assert gmpy2.mpfr(found) <= exact, (case.model, case.tau, found, float(exact))
            if found - beyond > 1e-3 and math.isfinite(
                float(exact)
            ):  # nearer to 1 the double itself is coarser than that
                assert found - beyond >= (1.0 - accuracy) * float(exact - beyond), (case.model, case.tau)
    for found, beyond in ((case.low, 0.0), (case.high, 1.0)):
        if math.isfinite(found):
            inside = beyond + (found - beyond) * np.array([0.5, 0.9, 0.999, 1.0 - 1e-6])
            for p, moment in zip(inside, case.model.log_moment(inside, case.tau), strict=True):
                assert moment >= -1e-9  # not NaN either
                if math.isinf(moment):  # lognormal jumps: the logarithm of the moment is itself beyond the doubles
                    assert log_moments(case.twin, case.tau, float(p), [0.0])[0].real > gmpy2.mpfr("1e308")


@each_case
def test_envelope_is_a_falling_majorant(name: str, seed: int) -> None:
    case = Case(name, seed)
    p = case.orders(3)[:, None]
    u = np.concatenate([[0.0], np.geomspace(1e-2, 1e5, 160) / case.s])[None, :]
    level = case.model.log_envelope(p, u, case.tau)
    value, size = case.model.log_cf_sized(u - 1j * p, case.tau)
    assert np.all(level >= value.real - 2.0 * EPS * size - 1e-13), (case.model, case.tau)
    slack = 1e-12 * (1.0 + np.abs(level[:, :-1]))
    assert np.all(np.diff(level, axis=1) <= slack), (case.model, case.tau)


@each_case
def test_logarithm_within_its_stated_rounding(name: str, seed: int) -> None:
    case = Case(name, seed)
    heights = [0.0, *(np.geomspace(0.03, 30.0, 7) / case.s)]
    for p in case.orders(1):
        z = np.array(heights) - 1j * p
        value, size = case.model.log_cf_sized(z, case.tau)
        exact = log_moments(case.twin, case.tau, float(p), [float(u) for u in heights])
        for i, true in enumerate(exact):
            error = float(abs(gmpy2.mpc(complex(value[i])) - true))
            assert error <= EPS * size[i], (case.model, case.tau, z[i], error, EPS * size[i])
            if 0.0 < p < 1.0:  # next to an edge of the strip digits are lost, and the cap has to say so
                assert EPS * size[i] <= 1e-9 * (1.0 + abs(complex(true))), (case.model, case.tau, z[i], EPS * size[i])


# Sets whose upper (or, by symmetry, lower) critical moment lies so near to 1 (to 0) that double precision can hardly
# hold the distance, or cannot: the strip must still be inside the true one.
NARROW = [
    ({"v0": 0.04, "kappa": 0.5, "theta": 0.04, "sigma": 8.0, "rho": 0.9}, 5.0),
    ({"v0": 0.0, "kappa": 1.8586, "theta": 4.76, "sigma": 20.0, "rho": 0.99}, 11.9),
    ({"v0": 0.000125, "kappa": 2.854, "theta": 0.4113, "sigma": 11.58, "rho": 0.4835}, 14.1),
    ({"v0": 0.04, "kappa": 0.0, "theta": 0.04, "sigma": 20.0, "rho": 0.999}, 50.0),
    ({"v0": 0.04, "kappa": 0.0, "theta": 0.04, "sigma": 20.0, "rho": -0.999}, 50.0),
    ({"v0": 0.04, "kappa": 0.0, "theta": 0.04, "sigma": 20.0, "rho": 0.0}, 50.0),
]


@pytest.mark.parametrize(("values", "tau"), NARROW)
def test_strip_of_narrow_sets_is_inside_the_true_one(values: dict[str, float], tau: float) -> None:
    low, high = (float(np.reshape(edge, -1)[0]) for edge in MODELS["heston"](**values).strip(tau))
    true_low, true_high = moment_strip(reference_model("heston", values), tau)
    assert true_low <= low <= 0.0
    assert 1.0 <= high <= true_high


def _limit(name: str, size: float) -> Any:
    """A set of the model that tends to Black's as ``size`` does to nothing."""
    return twins(name, _TO_BLACK[name](size))[0]


_TO_BLACK: dict[str, Callable[[float], dict[str, Any]]] = {
    "black": lambda e: {"volatility": 0.3},
    "heston": lambda e: {"v0": 0.04, "kappa": 1.5, "theta": 0.09, "sigma": e, "rho": -0.7},
    "bates": lambda e: {**_TO_BLACK["heston"](e), "jump_intensity": e, "jump_mean": -0.1, "jump_stdev": 0.2},
    "merton": lambda e: {"volatility": 0.3, "jump_intensity": e, "jump_mean": -0.1, "jump_stdev": 0.2},
    "kou": lambda e: {"volatility": 0.3, "jump_intensity": e, "up_probability": 0.4, "up_rate": 10.0, "down_rate": 5.0},
    "variance_gamma": lambda e: {"sigma": 0.3, "theta": -0.1, "nu": 1e-3 * e},
    "double_heston": lambda e: {
        "factors": [
            {"v0": 0.04, "kappa": 1.5, "theta": 0.09, "sigma": e, "rho": -0.7},
            {"v0": 0.01, "kappa": 0.2, "theta": 0.02, "sigma": 2.0 * e, "rho": 0.3},
        ]
    },
}


@pytest.mark.parametrize("name", list(MODELS))
@pytest.mark.parametrize("tau", [1.0 / 365.0, 2.0])
def test_black_limit(name: str, tau: float) -> None:
    """``log phi`` tends to ``-(z^2 + i z) V / 2``, V the mean variance, at first order in what is let go, down to
    nothing."""
    distances = []
    for size in (1e-3, 1e-4, 1e-5, 1e-8, 0.0):
        if size == 0.0 and name == "variance_gamma":
            break  # nu = 0 is outside the box: the limit alone is meant
        model = _limit(name, size)
        variance = float(np.reshape(model.mean_variance(tau), -1)[0])
        z = np.linspace(0.0, 6.0, 13) / math.sqrt(variance) - 0.4j
        value, rounding = model.log_cf_sized(z, tau)
        black = -0.5 * variance * (z * z + 1j * z)
        away = np.abs(value - black)
        distances.append(float(np.max(away)))
        if size == 0.0:
            assert np.all(away <= EPS * (rounding + 4.0 * np.abs(black)))
    if distances[0] > 1e-10:
        assert distances[1] < 0.2 * distances[0]
        assert distances[2] < 0.2 * distances[1]
    assert distances[3] < 1e-4 * distances[0] + 1e-13


@each_case
def test_moments_and_mean_variance(name: str, seed: int) -> None:
    case = Case(name, seed)
    p = case.orders(2)
    found = case.model.log_moment(p, case.tau)
    size = case.model.log_cf_sized(-1j * p, case.tau)[1]
    for i, order in enumerate(p):
        true = log_moments(case.twin, case.tau, float(order), [0.0])[0].real
        assert abs(float(gmpy2.mpfr(float(found[i])) - true)) <= EPS * size[i]
    with gmpy2.context(gmpy2.get_context(), precision=200):
        width = case.twin.prepare(case.tau).width()
    assert case.s == pytest.approx(width, rel=1e-14)


@pytest.mark.parametrize("name", list(MODELS))
def test_stacked_columns_are_the_models_one_by_one(name: str) -> None:
    cases = [
        pair(name, [float(x) for x in np.random.default_rng([7, i]).random(DIMENSIONS[name])])[0] for i in range(9)
    ]
    tau = np.geomspace(0.01, 10.0, 9)[:, None]
    stacked: Any = MODELS[name].stack(cases)
    z = np.array([0.3, 4.0, 50.0]) - 0.4j
    for i, model in enumerate(cases):
        t = float(tau[i, 0])
        value, size = model.log_cf_sized(z, t)
        assert np.all(np.abs(stacked.log_cf(z, tau)[i] - value) <= EPS * size)
        assert np.array_equal(np.reshape(stacked.mean_variance(tau), -1)[i], np.reshape(model.mean_variance(t), -1)[0])
        for ours, theirs in zip(stacked.strip(tau), model.strip(t), strict=True):
            assert np.reshape(ours, -1)[i] == pytest.approx(float(np.reshape(theirs, -1)[0]), rel=1e-12)
        again = stacked.take(np.array([i]))
        assert np.all(np.abs(again.log_cf(z, tau[[i]])[0] - value) <= EPS * size)
