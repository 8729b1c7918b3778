"""Derivatives of the log characteristic function, by every parameter and by time, against 30-digit differences."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import gmpy2
import numpy as np
import pytest

from engine import MODELS
from tests.properties.parameter_sets import DIMENSIONS, expiry, pair
from tests.properties.test_greeks_against_mpmath import shifted
from tests.reference.mp_models import reference_model
from tests.reference.mp_prices import log_moments

EPS = float(np.finfo(np.float64).eps)
QUICK_SETS, SETS = 4, 12  # drawn sets per model in the fast suite, and in all
CASES = [
    pytest.param(name, seed, marks=() if seed < QUICK_SETS else pytest.mark.long, id=f"{name}-{seed}")
    for name in MODELS
    for seed in range(SETS)
]
STEP = gmpy2.mpfr("1e-25")


def _difference(at: Callable[[Any], list[Any]]) -> list[Any]:
    """Central difference of a smooth function: the error is of the order of STEP squared."""
    with gmpy2.context(gmpy2.get_context(), precision=280):
        return [(up - down) / (2 * STEP) for up, down in zip(at(STEP), at(-STEP), strict=True)]


@pytest.mark.parametrize(("name", "seed"), CASES)
def test_gradient_against_differences(name: str, seed: int) -> None:
    rng = np.random.default_rng([seed, 77, len(name)])
    u = [float(x) for x in rng.random(DIMENSIONS[name] + 1)]
    model, twin = pair(name, u[:-1])
    tau = expiry(u[-1], low=1.0 / 8760.0, high=50.0)
    s = math.sqrt(float(np.reshape(model.mean_variance(tau), -1)[0]))
    low, high = (float(np.reshape(edge, -1)[0]) for edge in model.strip(tau))
    vols_of_vol = [one.sigma for one in (*getattr(model, "factors", ()), model) if hasattr(one, "sigma")]
    if s == 0.0 or 0.0 in vols_of_vol:
        pytest.skip("a limit the twin treats apart: the next test")
    heights = [0.0, *(np.array([0.1, 1.0, 5.0]) / s)]
    right, left = min(2.0 / s, 0.5 * (high - 1.0)), min(2.0 / s, -0.5 * low)
    for p in (0.5, 1.0 + right, -left):
        if float(np.ravel(model.log_moment(np.array([p]), tau))[0]) < 300.0:
            _compare(model, twin, tau, p, heights)


def _compare(model: Any, twin: Any, tau: float, p: float, heights: list[float]) -> None:
    z = np.array(heights) - 1j * p
    found = model.log_cf_gradient(z, tau)
    value, size = model.log_cf_sized(z, tau)
    assert np.all(np.abs(found.log_value - value) <= EPS * (size + found.size))
    with gmpy2.context(gmpy2.get_context(), precision=280):
        time = gmpy2.mpfr(tau)
        exact = [
            _difference(lambda h, n=n: log_moments(shifted(twin, n, h), time, p, heights, digits=60))
            for n in type(model).sensitivity_names
        ]
        exact.append(_difference(lambda h: log_moments(twin, time + h, p, heights, digits=60)))
    for i, row in enumerate(exact):
        for j, true in enumerate(row):
            error = float(abs(gmpy2.mpc(complex(found.gradient[i, j])) - true))
            cap = EPS * float(found.gradient_size[i, j])
            which = ([*type(model).sensitivity_names, "tau"][i], model, tau, z[j])
            assert error <= cap + 1e-300, (*which, complex(true), error, cap)
            scale = max(abs(complex(other)) for other in row)
            if p == 0.5:  # next to an edge of the strip digits are lost, and the cap has to say so
                assert cap <= 1e-8 * scale + 1e-300, (*which, complex(true), error, cap)


# Near the limits where a written-out derivative divides by something small: vol of vol to nothing, one day, no
# reversion.
NEAR_LIMITS = [
    ("heston", {"v0": 0.04, "kappa": 1.5, "theta": 0.06, "sigma": 1e-7, "rho": -0.7}, 0.5),
    ("heston", {"v0": 0.04, "kappa": 1.5, "theta": 0.06, "sigma": 1e-3, "rho": -0.7}, 1.0 / 365.0),
    ("heston", {"v0": 0.04, "kappa": 1e-9, "theta": 0.06, "sigma": 0.5, "rho": 0.3}, 1.0 / 365.0),
    ("heston", {"v0": 0.0, "kappa": 2.0, "theta": 0.06, "sigma": 0.5, "rho": -0.9}, 1.0 / 8760.0),
    ("heston", {"v0": 0.04, "kappa": 80.0, "theta": 0.06, "sigma": 15.0, "rho": 0.999999}, 30.0),
]


@pytest.mark.parametrize(("name", "values", "tau"), NEAR_LIMITS)
def test_gradient_near_the_limits(name: str, values: dict[str, Any], tau: float) -> None:
    model = MODELS[name](**values)
    s = math.sqrt(float(np.reshape(model.mean_variance(tau), -1)[0]))
    _compare(model, reference_model(name, values), tau, 0.5, [0.0, *(np.array([0.1, 1.0, 5.0]) / s)])
