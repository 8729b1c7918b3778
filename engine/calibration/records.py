"""What a calibration is asked and what it answers: frozen records, plain numbers."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from engine.arrays import Floats

__all__ = [
    "FELLER",
    "LOSSES",
    "RESIDUALS",
    "STATUSES",
    "WEIGHTS",
    "CalibratedSlice",
    "Calibration",
    "CalibrationSettings",
    "CalibrationSlice",
    "Prior",
]

RESIDUALS = ("vol", "price")
WEIGHTS = ("uniform", "spread", "vega")
FELLER = ("report", "require")
LOSSES = ("linear", "soft_l1", "huber")
STATUSES = ("converged", "at_bound", "stopped")


@dataclass(frozen=True, slots=True)
class CalibrationSlice:
    """One expiry to fit. ``expiry`` in years; ``strikes`` (n,) > 0 in the unit of the forward; ``vols`` (n,) implied
    volatilities, NaN where there is none to use; ``bid_vols`` and ``ask_vols`` (n,) or None, NaN where missing."""

    expiry: float
    forward: float
    discount_factor: float
    strikes: Floats
    vols: Floats
    bid_vols: Floats | None = None
    ask_vols: Floats | None = None


@dataclass(frozen=True, slots=True)
class Prior:
    """Parameters to pull toward, some or all, and how hard.

    With ``strength`` 1, all of them off by their own size (a correlation off by 1) weigh as much as an error of 0.01 in
    volatility at every quote; see ``engine.calibration.objective``. ``strength`` 0 is no pull."""

    parameters: Mapping[str, float]
    strength: float


@dataclass(frozen=True, slots=True)
class CalibrationSettings:
    """How to fit. Every choice has a default; names as in ``RESIDUALS``, ``WEIGHTS``, ``FELLER``, ``LOSSES``.

    ``bounds`` replace the room usually searched (``engine.calibration.coordinates``), ``fixed`` parameters are not
    fitted, ``start`` replaces the automatic start where it names a parameter. ``starts`` > 1 adds random starts from
    ``seed``; the best fit is kept. ``tolerance``: the tightest asked of prices, relative to the
    out-of-the-money value; where residuals are large, 1e-9 of them is enough. ``max_evaluations``: surface evaluations
    allowed to each descent: every start, and the last stage.
    """

    model: str = "heston"
    residuals: str = "vol"
    weights: str = "uniform"
    feller: str = "report"
    loss: str = "linear"
    bounds: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    fixed: Mapping[str, float] = field(default_factory=dict)
    start: Mapping[str, float] = field(default_factory=dict)
    prior: Prior | None = None
    starts: int = 1
    seed: int = 0
    tolerance: float = 1e-12
    max_evaluations: int = 200


@dataclass(frozen=True, slots=True)
class CalibratedSlice:
    """One expiry fitted, columns (n,) in the order sent. ``residual_vols`` is model less market, NaN where the market
    has none; ``used``: whether the quote took part in the fit."""

    expiry: float
    strikes: Floats
    market_vols: Floats
    model_vols: Floats
    residual_vols: Floats
    used: np.ndarray


@dataclass(frozen=True, slots=True)
class Calibration:
    """The answer.

    ``status``: ``converged``; ``at_bound``, converged with parameters held by a bound; ``stopped``, the evaluations
    ran out or no start could be valued. ``standard_errors``: None for parameters that are fixed or on a bound.
    ``correlation`` (q, q) of the parameters named by ``correlation_order``, those with a standard error.
    ``condition_number`` of the Jacobian in relative changes of the parameters. ``feller_ratio``: ``2 kappa theta /
    sigma^2``, the smallest over the factors, None for a model without a variance factor or with ``sigma = 0``.
    ``rmse_vol``, ``rmse_price`` (in the unit of the forward) and ``max_abs_error_vol`` are plain, unweighted, over the
    quotes used. ``within_spread``: the share of the quotes with bid and ask whose model volatility lies between, None
    where there is none. ``evaluations``: of the whole surface, all starts; ``iterations`` of the start that was kept.
    """

    model: str
    status: str
    parameters: dict[str, float]
    standard_errors: dict[str, float | None]
    correlation: Floats
    correlation_order: tuple[str, ...]
    at_bound: list[str]
    condition_number: float
    feller_ratio: float | None
    rmse_vol: float
    rmse_price: float
    max_abs_error_vol: float
    within_spread: float | None
    iterations: int
    evaluations: int
    slices: list[CalibratedSlice]
    warnings: list[str]
