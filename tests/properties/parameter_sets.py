"""Parameter sets of every model out of the unit cube, corners of the box included.

A set is made from a vector of numbers in [0, 1]: from hypothesis in the quick tests, from a seeded generator in the
long runs. Most coordinates are logarithms of a parameter; a small share of each goes to the exact edges (``v0 = 0``,
``kappa = 0``, ...), because that is where formulas break.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from hypothesis import strategies as st
from hypothesis.strategies import SearchStrategy

from engine import MODELS
from tests.reference.mp_models import reference_model

__all__ = ["DIMENSIONS", "expiry", "pair", "twins", "unit_cube"]

HOUR = 1.0 / (365.0 * 24.0)


def _spread(u: float, low: float, high: float) -> float:
    """``low`` to ``high``, evenly in the logarithm."""
    return min(max(low * (high / low) ** u, low), high)


def _or_zero(u: float, low: float, high: float, share: float = 0.06) -> float:
    return 0.0 if u < share else _spread((u - share) / (1.0 - share), low, high)


def _correlation(u: float) -> float:
    """Half of them even in (-1, 1); a quarter toward either end, down to ``1 - |rho| = 1e-12``."""
    if u < 0.5:
        return 1.98 * (2.0 * u) - 0.99
    near = 1.0 - 10.0 ** (-1.0 - 11.0 * (4.0 * u % 1.0))
    return near if u >= 0.75 else -near


def _heston(u: Sequence[float]) -> dict[str, Any]:
    """Six coordinates. Feller ratio ``2 kappa theta / sigma^2`` from 1e-3 to 1e3, or sigma itself from 0 to 20."""
    v0, kappa, theta = _or_zero(u[0], 1e-6, 10.0), _or_zero(u[1], 1e-3, 100.0), _or_zero(u[2], 1e-6, 10.0)
    if u[3] < 0.6 and kappa * theta > 0.0:
        sigma = min(20.0, math.sqrt(2.0 * kappa * theta / _spread(u[4], 1e-3, 1e3)))
    else:
        sigma = _or_zero(u[4], 1e-8, 20.0)
    return {"v0": v0, "kappa": kappa, "theta": theta, "sigma": sigma, "rho": _correlation(u[5])}


def _black(u: Sequence[float]) -> dict[str, Any]:
    return {"volatility": _spread(u[0], 1e-4, 10.0)}


def _signed(u: float, low: float, high: float) -> float:
    return _spread(2.0 * u, low, high) if u < 0.5 else -_spread(2.0 * u - 1.0, low, high)


def _jumps(u: Sequence[float]) -> dict[str, Any]:
    return {
        "jump_intensity": _or_zero(u[0], 1e-3, 100.0),
        "jump_mean": _signed(u[1], 1e-3, 1.0),
        "jump_stdev": _or_zero(u[2], 1e-3, 1.0),
    }


def _merton(u: Sequence[float]) -> dict[str, Any]:
    return {"volatility": _spread(u[0], 1e-3, 5.0), **_jumps(u[1:])}


def _kou(u: Sequence[float]) -> dict[str, Any]:
    """Five coordinates; mean jumps from 1e-3 to 5 in the log, of which the forward allows 0.95 upward."""
    return {
        "volatility": _spread(u[0], 1e-3, 5.0),
        "jump_intensity": _or_zero(u[1], 1e-3, 100.0),
        "up_probability": 0.0 if u[2] < 0.05 else (1.0 if u[2] > 0.95 else (u[2] - 0.05) / 0.9),
        "up_rate": 1.0 + _spread(u[3], 0.05, 1e3),
        "down_rate": _spread(u[4], 0.2, 1e3),
    }


def _bates(u: Sequence[float]) -> dict[str, Any]:
    """Nine coordinates. Jumps of nearly one size leave the reference no contour: the deviation is at least a sixth of
    the mean, and Merton's model, which has a series, stands in for the rest."""
    jumps = _jumps(u[6:])
    jumps["jump_stdev"] = max(jumps["jump_stdev"], abs(jumps["jump_mean"]) / 6.0)
    return {**_heston(u[:6]), **jumps}


def _double_heston(u: Sequence[float]) -> dict[str, Any]:
    return {"factors": [_heston(u[:6]), _heston(u[6:])]}


def _variance_gamma(u: Sequence[float]) -> dict[str, Any]:
    """Three coordinates; ``nu`` is kept where the forward exists, up to 999 parts in 1000 of that range."""
    sigma, theta = _spread(u[0], 1e-2, 3.0), _signed(u[1], 1e-3, 3.0)
    pull = theta + 0.5 * sigma * sigma
    return {"sigma": sigma, "theta": theta, "nu": min(_spread(u[2], 1e-3, 20.0), 0.999 / pull if pull > 0.0 else 20.0)}


_MAKERS: dict[str, tuple[int, Callable[[Sequence[float]], dict[str, Any]]]] = {
    "black": (1, _black),
    "heston": (6, _heston),
    "bates": (9, _bates),
    "merton": (4, _merton),
    "kou": (5, _kou),
    "variance_gamma": (3, _variance_gamma),
    "double_heston": (12, _double_heston),
}
DIMENSIONS = {name: size for name, (size, _) in _MAKERS.items()}


def pair(name: str, u: Sequence[float]) -> tuple[Any, Any]:
    """The engine's model ``name`` and its reference twin; ``u`` has ``DIMENSIONS[name]`` numbers in [0, 1]."""
    size, make = _MAKERS[name]
    assert len(u) == size
    return twins(name, make(u))


def twins(name: str, values: dict[str, Any]) -> tuple[Any, Any]:
    """The engine's model and the reference's from parameters by their public names."""
    twin = reference_model(name, values)
    if name == "double_heston":
        return MODELS[name](factors=tuple(MODELS["heston"](**factor) for factor in values["factors"])), twin
    return MODELS[name](**values), twin


def unit_cube(size: int) -> SearchStrategy[list[float]]:
    """Vectors in the unit cube: half of them even in it (hypothesis picks the seed), half with its taste for edges."""
    even = st.integers(0, 2**32 - 1).map(lambda seed: [float(x) for x in np.random.default_rng(seed).random(size)])
    edgy = st.lists(st.floats(0.0, 1.0, allow_subnormal=False), min_size=size, max_size=size)
    return st.one_of(even, edgy)


def expiry(u: float, *, low: float = 1.0 / 365.0, high: float = 20.0) -> float:
    """Years, evenly in the logarithm; a day to twenty years unless said otherwise."""
    return _spread(u, low, high)
