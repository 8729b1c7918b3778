"""Schemas that pricing resources share: model, slices, outputs and tolerance asked; a slice priced."""

from __future__ import annotations

from typing import Annotated, Any, Final, Literal, TypeAlias

from pydantic import Field

from engine import TOLERANCE_RANGE
from service.fields import Answer, described
from service.terms.models import AnyModel
from service.terms.schemas import AnyPayoff, PricedExpiry, SliceAsked, SmileTerms, WordOrColumn

__all__ = ["EXAMPLE", "Output", "PricingAsked", "SmileAnswer", "SmileSliceAsked"]

Output: TypeAlias = Literal["price", "implied_vol", "error_bound"]
EXAMPLE: Final[dict[str, Any]] = {
    "model": {"name": "heston", "v0": 0.04, "kappa": 4.0, "theta": 0.25, "sigma": 1.0, "rho": -0.5},
    "market": {"spot": 100.0, "rate": 0.01, "dividend_yield": 0.02},
    "slices": [{"expiry": 1.0, "strikes": [80.0, 90.0, 100.0, 110.0, 120.0], "payoff": "call"}],
}


class SmileSliceAsked(SliceAsked):
    """One expiry to price."""

    expiry: PricedExpiry = described(
        "Time to expiry: years, from one hour to fifty years; or a date, counted from valuation_date.",
        unit="years, or date YYYY-MM-DD",
        example=1.0,
    )
    payoff: WordOrColumn[AnyPayoff] = described(
        "What is paid: one word for all strikes, or one per strike. otm is the vanilla out of the money against the "
        "forward: the call where strike >= forward, else the put. Digitals pay one unit of money at expiry.",
        unit="none",
        example="call",
    )


class PricingAsked(SmileTerms):
    """Slices to price under a model."""

    model: AnyModel = described("The model and its parameters.", unit="none", example=EXAMPLE["model"])
    slices: Annotated[list[SmileSliceAsked], Field(min_length=1)] = described(
        "The expiries to price, in any order.", unit="none", example=EXAMPLE["slices"]
    )
    outputs: Annotated[list[Output], Field(min_length=1, max_length=16)] = described(
        "What to answer; what is not named is absent.",
        unit="none",
        example=["price", "implied_vol", "error_bound"],
        default=("price", "implied_vol", "error_bound"),  # a tuple: a list is copied for every request
    )
    tolerance: float = described(
        "Error asked for, relative to the out-of-the-money value.",
        unit="relative",
        example=1e-10,
        default=1e-10,
        ge=TOLERANCE_RANGE[0],
        le=TOLERANCE_RANGE[1],
    )


class TransformAnswer(Answer):
    """How a slice was priced."""

    method: str = described(
        "closed_form (Black's formula), contour_fft (plain contour), deformed_contour, or the last two joined by +.",
        unit="none",
        example="contour_fft",
    )
    exponents: list[float] = described(
        "Where the contours cross the imaginary axis, one per row.", unit="dimensionless", example=[0.5]
    )
    nodes: int = described("Evaluations of the characteristic function.", unit="count", example=56)


class SmileAnswer(Answer):
    """One expiry priced; columns in the order of the strikes sent."""

    expiry: float = described("Time to expiry.", unit="years", example=1.0)
    forward: float = described("Forward used.", unit="price of one underlying", example=99.00498337491681)
    discount_factor: float = described(
        "Discount factor used.", unit="money now per money at expiry", example=0.9900498337491681
    )
    strikes: list[float] = described("Strikes as sent.", unit="price of one underlying", example=[80.0, 100.0])
    payoffs: list[Literal["call", "put", "digital_call", "digital_put"]] = described(
        "Payoff at each strike, otm resolved into call or put.", unit="none", example=["call", "call"]
    )
    statuses: list[str] = described(
        "Per strike: ok; tolerance_not_met (the numbers are there, the bound exceeds the tolerance); zero_time_value "
        "or above_maximum (the value is too near its bound for a volatility).",
        unit="none",
        example=["ok", "ok"],
    )
    prices: list[float] | None = described(
        "Present value of the payoff per one unit of the underlying.",
        unit="price of one underlying; money for digitals",
        example=[26.774758743998854, 16.07015491702883],
        default=None,
    )
    implied_vols: list[float | None] | None = described(
        "Volatility of the out-of-the-money vanilla at the strike, digitals included; null where the status says why.",
        unit="per square root of a year",
        example=[0.4464739970102668, 0.42448518175711086],
        default=None,
    )
    error_bounds: list[float] | None = described(
        "Absolute bound on the error of the price as returned.",
        unit="that of the price",
        example=[2.1e-13, 1.4e-13],
        default=None,
    )
    transform: TransformAnswer = described(
        "How it was priced.", unit="none", example={"method": "contour_fft", "exponents": [0.5], "nodes": 56}
    )
