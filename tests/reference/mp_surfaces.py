"""Surfaces of implied volatilities made from multiple-precision prices: what a calibration is given to fit.

Prices come from ``tests.reference.mp_prices``, which verifies its digits; they become volatilities by the inversion of
``engine.black``, which is checked by itself against multiple precision in ``test_implied_vol_mpmath.py``.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from engine.black import total_deviation
from engine.calibration import CalibrationSlice
from tests.reference.mp_models import reference_model
from tests.reference.mp_prices import otm_values

__all__ = ["DISCOUNT_RATE", "FORWARD", "EXPIRIES", "heston_draw", "jump_draw", "surface"]

FORWARD, DISCOUNT_RATE = 100.0, 0.02
EXPIRIES = (0.1, 0.25, 0.6, 1.2, 2.5)
DIGITS = 16


def surface(
    name: str, values: dict[str, Any], *, expiries: Sequence[float] = EXPIRIES, strikes: int = 9, reach: float = 1.6
) -> list[CalibrationSlice]:
    """Noise-free quotes of a model by its public names; strikes to ``reach`` deviations at 20 % volatility or so."""
    model = reference_model(name, values)
    level = np.sqrt(_level(values))
    out = []
    for tau in expiries:
        k = np.linspace(-reach, 0.8 * reach, strikes) * level * np.sqrt(tau)
        at = FORWARD * np.exp(k)
        value = np.array([float(v) for v in otm_values(model, tau, FORWARD, at.tolist(), digits=DIGITS)])
        vols = total_deviation(np.log(at / FORWARD), value).deviations / np.sqrt(tau)
        assert np.isfinite(vols).all()
        out.append(CalibrationSlice(tau, FORWARD, float(np.exp(-DISCOUNT_RATE * tau)), at, vols))
    return out


def _level(values: dict[str, Any]) -> float:
    """A variance to space the strikes by."""
    if "v0" in values:
        return 0.5 * (values["v0"] + values["theta"])
    return float(values.get("volatility", values.get("sigma", 0.2))) ** 2


def heston_draw(rng: np.random.Generator) -> dict[str, float]:
    """A parameter set of the usual region."""
    return {
        "v0": rng.uniform(0.01, 0.25),
        "kappa": rng.uniform(0.5, 5.0),
        "theta": rng.uniform(0.01, 0.25),
        "sigma": rng.uniform(0.1, 1.5),
        "rho": rng.uniform(-0.9, 0.0),
    }


def jump_draw(rng: np.random.Generator) -> dict[str, float]:
    """Jumps as equity surfaces show them: one in ten years to two a year, mostly down (common practice, no source)."""
    return {
        "jump_intensity": rng.uniform(0.1, 2.0),
        "jump_mean": rng.uniform(-0.2, 0.05),
        "jump_stdev": rng.uniform(0.03, 0.2),
    }
