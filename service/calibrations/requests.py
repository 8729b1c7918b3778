"""Request of ``POST /v1/calibrations``."""

from __future__ import annotations

from typing import Annotated, Any, Final, Literal, TypeAlias

from pydantic import Field

from service.fields import Asked, Finite, described
from service.terms.chain import EXAMPLE as CHAIN
from service.terms.chain import ChainAsked
from service.terms.schemas import PricedExpiry, SliceAsked, SmileTerms

__all__ = ["EXAMPLE", "CalibrationAsked", "ModelName", "PriorAsked", "SurfaceAsked", "VolSliceAsked", "VolsAsked"]

ModelName: TypeAlias = Literal["black", "heston", "bates", "merton", "variance_gamma", "double_heston"]
# Black volatilities of an invented index, falling with the strike; twelve quotes of two expiries.
_SLICES: Final[list[dict[str, Any]]] = [
    {
        "expiry": 0.25,
        "strikes": [85.0, 90.0, 95.0, 100.0, 105.0, 110.0],
        "implied_vols": [0.262, 0.241, 0.222, 0.205, 0.191, 0.182],
        "bid_vols": [0.259, 0.239, 0.22, 0.203, 0.189, 0.179],
        "ask_vols": [0.265, 0.243, 0.224, 0.207, 0.193, 0.185],
    },
    {
        "expiry": 1.0,
        "strikes": [80.0, 90.0, 100.0, 110.0, 120.0, 130.0],
        "implied_vols": [0.25, 0.231, 0.214, 0.2, 0.19, 0.184],
        "bid_vols": [0.247, 0.229, 0.212, 0.198, 0.188, 0.181],
        "ask_vols": [0.253, 0.233, 0.216, 0.202, 0.192, 0.187],
    },
]
EXAMPLE: Final[dict[str, Any]] = {
    "model": "heston",
    "surfaces": [
        {"id": "INDEX", "vols": {"market": {"spot": 100.0, "rate": 0.02, "dividend_yield": 0.01}, "slices": _SLICES}}
    ],
    "weights": "spread",
}
Vols: TypeAlias = Annotated[
    list[Annotated[float, Field(gt=0.0, le=10.0, allow_inf_nan=False)] | None], Field(min_length=1, fail_fast=True)
]
Bound: TypeAlias = Annotated[list[Finite], Field(min_length=2, max_length=2)]


def _vols(text: str, example: list[float | None], **options: Any) -> Any:
    full = f"{text}, one per strike; null where there is none."
    return described(full, unit="per square root of a year", example=example, **options)


class VolSliceAsked(SliceAsked):
    """Volatilities of one expiry. Forward and discount factor stand here, or follow from ``market``."""

    expiry: PricedExpiry = described(
        "Time to expiry: years; or a date, counted from valuation_date.",
        unit="years, or date YYYY-MM-DD",
        example=0.25,
    )
    implied_vols: Vols = _vols("Implied volatilities to fit", [0.23, 0.205, None])
    bid_vols: Vols | None = _vols("Volatilities of the bids", [0.228, 0.203, None], default=None)
    ask_vols: Vols | None = _vols("Volatilities of the asks", [0.232, 0.207, None], default=None)


class VolsAsked(SmileTerms):
    """A surface of volatilities."""

    slices: Annotated[list[VolSliceAsked], Field(min_length=1)] = described(
        "One entry per expiry, in any order.", unit="none", example=_SLICES
    )


class SurfaceAsked(Asked):
    """One surface: an option chain or volatilities, one of the two."""

    id: Annotated[str, Field(min_length=1, max_length=100, pattern=r"^[^\x00-\x1f\x7f]*$")] = described(
        "A name of your own, the only one of its kind in the request.", unit="none", example="INDEX"
    )
    chain: ChainAsked | None = described(
        "An option chain as for /v1/chains. It goes through the same clean-up; what is left out is listed.",
        unit="none",
        example=CHAIN,
        default=None,
    )
    vols: VolsAsked | None = described(
        "Volatilities, as they are.",
        unit="none",
        example=EXAMPLE["surfaces"][0]["vols"],
        default=None,
    )


class PriorAsked(Asked):
    """Parameters to be pulled toward, as yesterday's."""

    parameters: dict[str, Finite] = described(
        "Some or all of the model's parameters by name.", unit="as the parameters", example={"kappa": 2.0}
    )
    strength: float = described(
        "How hard: with 1, all parameters off by their own size weigh as much as an error of 0.01 in volatility at "
        "every quote; 0 is no pull.",
        unit="none",
        example=0.1,
        ge=0.0,
        le=1e6,
    )


def _by_name(text: str, unit: str, example: dict[str, Any]) -> Any:
    return described(f"{text} By the model's parameter names.", unit=unit, example=example, default_factory=dict)


class CalibrationAsked(Asked):
    """Fit one model to one or many surfaces, each on its own."""

    model: ModelName = described("The model to fit.", unit="none", example="heston")
    surfaces: Annotated[list[SurfaceAsked], Field(min_length=1)] = described(
        "The surfaces; results keep their order.", unit="none", example=EXAMPLE["surfaces"]
    )
    residuals: Literal["vol", "price"] = described(
        "What is made small: differences in implied volatility, or in price.", unit="none", example="vol", default="vol"
    )
    weights: Literal["spread", "vega", "uniform"] = described(
        "How much a quote counts: by the inverse of its bid-ask spread, by its vega, or all alike.",
        unit="none",
        example="spread",
        default="uniform",
    )
    feller: Literal["report", "require"] = described(
        "Whether 2 kappa theta >= sigma^2 is only reported, or required of the fit.",
        unit="none",
        example="report",
        default="report",
    )
    loss: Literal["linear", "soft_l1", "huber"] = described(
        "linear squares residuals; the others let bad quotes count less.",
        unit="none",
        example="linear",
        default="linear",
    )
    bounds: dict[str, Bound] = _by_name("Lowest and highest value to search.", "as the parameters", {"kappa": [0.5, 8]})
    fixed: dict[str, Finite] = _by_name("Values that are not fitted.", "as the parameters", {"kappa": 2.0})
    start: dict[str, Finite] = _by_name(
        "Values to start from instead of those taken from the surface.", "as the parameters", {"rho": -0.6}
    )
    prior: PriorAsked | None = described(
        "Parameters to be pulled toward.",
        unit="none",
        example={"parameters": {"kappa": 2.0}, "strength": 0.1},
        default=None,
    )
    starts: int = described(
        "Starts in all; those after the first are random, the best fit is kept.",
        unit="count",
        example=1,
        default=1,
        ge=1,
        le=100,
    )
    seed: int = described(
        "Seed of the random starts: the same seed gives the same result.",
        unit="none",
        example=0,
        default=0,
        ge=0,
        le=2**31 - 1,
    )
