"""Answers about calibrations."""

from __future__ import annotations

from typing import Any, Final, Literal

from service.fields import Answer, described
from service.jobs.schemas import JobAnswer

__all__ = ["CalibrationJobAnswer", "CalibrationResult", "FittedSlice", "LeftOut", "SurfaceResult"]

_SLICE: Final[dict[str, Any]] = {
    "expiry": 0.25,
    "forward": 100.25,
    "discount_factor": 0.995,
    "strikes": [90.0, 100.0],
    "market_vols": [0.241, 0.205],
    "bid_vols": [0.239, 0.203],
    "ask_vols": [0.243, 0.207],
    "model_vols": [0.2405, 0.2052],
    "residual_vols": [-0.0005, 0.0002],
    "used": [True, True],
}
_PARAMETERS: Final = {"v0": 0.042, "kappa": 2.1, "theta": 0.047, "sigma": 0.61, "rho": -0.68}
_ERRORS: Final = {"v0": 0.001, "kappa": 0.5, "theta": 0.002, "sigma": 0.05, "rho": 0.02}
_COLUMN: Final = "per square root of a year"


class FittedSlice(Answer):
    """One expiry; columns in the order of the strikes sent, null where there is no number."""

    expiry: float = described("Time to expiry.", unit="years", example=0.25)
    forward: float = described("The forward, as given or inferred.", unit="price of one underlying", example=100.25)
    discount_factor: float = described(
        "The discount factor, as given or inferred.", unit="money now per money at expiry", example=0.995
    )
    strikes: list[float] = described("Strikes as sent.", unit="price of one underlying", example=[90.0, 100.0])
    market_vols: list[float | None] = described("What was fitted to.", unit=_COLUMN, example=_SLICE["market_vols"])
    bid_vols: list[float | None] | None = described(
        "Of the bids; null without quotes.", unit=_COLUMN, example=_SLICE["bid_vols"]
    )
    ask_vols: list[float | None] | None = described(
        "Of the asks; null without quotes.", unit=_COLUMN, example=_SLICE["ask_vols"]
    )
    model_vols: list[float | None] = described("Of the fitted model.", unit=_COLUMN, example=_SLICE["model_vols"])
    residual_vols: list[float | None] = described("Model less market.", unit=_COLUMN, example=_SLICE["residual_vols"])
    used: list[bool] = described("Whether the quote took part in the fit.", unit="none", example=[True, True])


class LeftOut(Answer):
    """A quote, or a whole expiry, that the clean-up left out of the fit."""

    expiry: float = described("Time to expiry.", unit="years", example=0.25)
    strike: float | None = described(
        "The strike; null for the whole expiry.", unit="price of one underlying", example=110.0
    )
    flags: list[str] = described(
        "Why: the flags of the out-of-the-money quote, or the status of its volatility or of the expiry.",
        unit="none",
        example=["crossed"],
    )


class SurfaceResult(Answer):
    """One surface. Where there is no fit (status refused or failed) numbers are null and warnings say why."""

    id: str = described("As sent.", unit="none", example="INDEX")
    status: Literal["converged", "at_bound", "stopped", "refused", "failed"] = described(
        "converged; at_bound: converged, but a bound holds parameters; stopped: the evaluations ran out; refused: the "
        "surface or the settings cannot be fitted; failed: a defect of the service.",
        unit="none",
        example="converged",
    )
    parameters: dict[str, float] | None = described(
        "The fitted parameters by name.", unit="as the parameters", example=_PARAMETERS
    )
    model: dict[str, Any] | None = described(
        "The same as a model object of /v1/smiles.", unit="as the parameters", example={"name": "heston", **_PARAMETERS}
    )
    standard_errors: dict[str, float | None] | None = described(
        "One standard error each, from the Jacobian and the residuals; null for parameters fixed or on a bound.",
        unit="as the parameters",
        example=_ERRORS,
    )
    correlation: list[list[float | None]] | None = described(
        "Correlation of the parameters named by correlation_order.", unit="none", example=[[1.0, 0.4], [0.4, 1.0]]
    )
    correlation_order: list[str] | None = described(
        "Rows and columns of correlation: the parameters with a standard error.", unit="none", example=["v0", "kappa"]
    )
    at_bound: list[str] | None = described("Parameters held by a bound.", unit="none", example=[])
    condition_number: float | None = described(
        "Of the Jacobian in relative changes of the parameters.", unit="none", example=85.0
    )
    feller_ratio: float | None = described(
        "2 kappa theta / sigma^2, the smallest over the factors; null where the model has none.",
        unit="none",
        example=0.53,
    )
    rmse_vol: float | None = described("Root mean square error over the quotes used.", unit=_COLUMN, example=0.0007)
    rmse_price: float | None = described(
        "Root mean square error over the quotes used.", unit="price of one underlying", example=0.02
    )
    max_abs_error_vol: float | None = described("Largest error over the quotes used.", unit=_COLUMN, example=0.002)
    within_spread: float | None = described(
        "Share of the quotes with bid and ask whose model volatility lies between; null where there is none.",
        unit="share, 0 to 1",
        example=0.92,
    )
    iterations: int | None = described("Iterations of the start that was kept.", unit="count", example=9)
    evaluations: int | None = described("Evaluations of the whole surface, all starts.", unit="count", example=11)
    slices: list[FittedSlice] = described("One entry per expiry fitted.", unit="none", example=[_SLICE])
    left_out: list[LeftOut] = described("What the clean-up of a chain left out.", unit="none", example=[])
    warnings: list[str] = described("What a reader of the fit should know, in words.", unit="none", example=[])


class CalibrationResult(Answer):
    """Surfaces in the order sent."""

    surfaces: list[SurfaceResult] = described("One entry per surface sent.", unit="none", example=[])


class CalibrationJobAnswer(JobAnswer):
    """A calibration job."""

    result: CalibrationResult | None = described(
        "The fits, once the job has succeeded; null until then.", unit="none", example=None
    )
