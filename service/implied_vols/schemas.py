"""Request and answer of ``POST /v1/implied-vols``."""

from __future__ import annotations

from typing import Annotated, Any, Final, Literal

from pydantic import Field

from service.fields import Answer, Finite, described
from service.terms.schemas import QuotedExpiry, SliceAsked, SmileTerms, VanillaPayoff, WarningAnswer, WordOrColumn

__all__ = ["EXAMPLE", "ImpliedVolsAnswer", "ImpliedVolsAsked", "PricesSliceAsked"]

# Prices of A. Lewis, "Heston Model Reference Prices" (2019), rounded; the last is below its intrinsic value.
EXAMPLE: Final[dict[str, Any]] = {
    "market": {"spot": 100.0, "rate": 0.01, "dividend_yield": 0.02},
    "slices": [
        {
            "expiry": 1.0,
            "strikes": [80.0, 100.0, 120.0, 60.0],
            "payoff": "call",
            "prices": [26.774758743998854, 16.070154917028834, 9.024913483457836, 30.0],
        }
    ],
}


class PricesSliceAsked(SliceAsked):
    """One expiry with a price at each strike."""

    expiry: QuotedExpiry = described(
        "Time to expiry: years; or a date, counted from valuation_date. Zero or less has status expired.",
        unit="years, or date YYYY-MM-DD",
        example=1.0,
    )
    payoff: WordOrColumn[VanillaPayoff] = described(
        "What the prices are for: one word for all strikes, or one per strike. otm is the vanilla out of the money "
        "against the forward.",
        unit="none",
        example="call",
    )
    prices: Annotated[list[Finite | None], Field(min_length=1, fail_fast=True)] = described(
        "Present values, one per strike; null where there is none.",
        unit="price of one underlying",
        example=[26.77, 16.07, None],
    )


class ImpliedVolsAsked(SmileTerms):
    """Turn prices into Black volatilities."""

    slices: Annotated[list[PricesSliceAsked], Field(min_length=1)] = described(
        "The expiries, in any order.", unit="none", example=EXAMPLE["slices"]
    )


class VolsSliceAnswer(Answer):
    """One expiry; columns in the order of the strikes sent."""

    expiry: float = described("Time to expiry.", unit="years", example=1.0)
    forward: float = described("Forward used.", unit="price of one underlying", example=99.00498337491681)
    discount_factor: float = described(
        "Discount factor used.", unit="money now per money at expiry", example=0.9900498337491681
    )
    strikes: list[float] = described("Strikes as sent.", unit="price of one underlying", example=[80.0, 60.0])
    payoffs: list[Literal["call", "put"]] = described(
        "Payoff at each strike, otm resolved into call or put.", unit="none", example=["call", "call"]
    )
    implied_vols: list[float | None] = described(
        "Black volatility; null where the status says why.",
        unit="per square root of a year",
        example=[0.446473997010267, None],
    )
    statuses: list[Literal["ok", "below_intrinsic", "above_maximum", "zero_time_value", "not_finite", "expired"]] = (
        described(
            "Per strike: ok; below_intrinsic and above_maximum (outside the no-arbitrage bounds); zero_time_value "
            "(equal to the lower bound as far as a double can tell); not_finite (null was sent); expired.",
            unit="none",
            example=["ok", "below_intrinsic"],
        )
    )


class ImpliedVolsAnswer(Answer):
    """Slices in the order sent."""

    slices: list[VolsSliceAnswer] = described(
        "One entry per slice sent.",
        unit="none",
        example=[
            {
                "expiry": 1.0,
                "forward": 99.00498337491681,
                "discount_factor": 0.9900498337491681,
                "strikes": [80.0, 60.0],
                "payoffs": ["call", "call"],
                "implied_vols": [0.446473997010267, None],
                "statuses": ["ok", "below_intrinsic"],
            }
        ],
    )
    warnings: list[WarningAnswer] = described(
        "Admissible values that look like slips of units; empty if there are none.", unit="none", example=[]
    )
