"""Schemas of market, dates and slices that several resources share."""

from __future__ import annotations

from datetime import date
from typing import Annotated, Any, Final, Literal, TypeAlias, TypeVar

from pydantic import Discriminator, Field, Tag

from engine import EXPIRY_RANGE
from service.fields import PRICE_RANGE, Answer, Asked, Strikes, described

__all__ = [
    "DISCOUNT_LIMITS",
    "DISCOUNT_RANGE",
    "FORWARD_LIMITS",
    "FORWARD_RANGE",
    "LATEST",
    "AnyPayoff",
    "DayCount",
    "MarketAsked",
    "PricedExpiry",
    "QuotedExpiry",
    "SliceAsked",
    "SmileTerms",
    "VanillaPayoff",
    "WarningAnswer",
    "WordOrColumn",
]

DayCount: TypeAlias = Literal["ACT/365F", "ACT/360", "ACT/ACT"]
AnyPayoff: TypeAlias = Literal["call", "put", "otm", "digital_call", "digital_put"]
VanillaPayoff: TypeAlias = Literal["call", "put", "otm"]
_Word = TypeVar("_Word")


def _word_or_column(value: Any) -> str:
    return "column" if isinstance(value, list) else "word"


WordOrColumn = Annotated[
    Annotated[_Word, Tag("word")] | Annotated[list[_Word], Field(min_length=1, fail_fast=True), Tag("column")],
    Discriminator(_word_or_column),
]
LATEST: Final = EXPIRY_RANGE[1]
FORWARD_RANGE: Final = PRICE_RANGE
DISCOUNT_RANGE: Final = (1e-12, 1e3)  # as the engine admits it
FORWARD_LIMITS: Final = {"ge": FORWARD_RANGE[0], "le": FORWARD_RANGE[1]}
DISCOUNT_LIMITS: Final = {"ge": DISCOUNT_RANGE[0], "le": DISCOUNT_RANGE[1]}


def _years_or_date(value: Any) -> str:
    return "date" if isinstance(value, str | date) else "years"


_Date: TypeAlias = Annotated[date, Tag("date")]
PricedExpiry: TypeAlias = Annotated[
    Annotated[float, Field(ge=EXPIRY_RANGE[0], le=LATEST, allow_inf_nan=False), Tag("years")] | _Date,
    Discriminator(_years_or_date),
]
QuotedExpiry: TypeAlias = Annotated[
    Annotated[float, Field(ge=-LATEST, le=LATEST, allow_inf_nan=False), Tag("years")] | _Date,
    Discriminator(_years_or_date),
]


class MarketAsked(Asked):
    """A flat market with continuous rates, from which forwards and discount factors follow:
    forward = spot exp((rate - dividend_yield) expiry), discount factor = exp(-rate expiry)."""

    spot: float = described(
        "Price of the underlying now.", unit="price of one underlying", example=100.0, **FORWARD_LIMITS
    )
    rate: float = described(
        "Continuous interest rate (0.05 is 5 %).", unit="decimals per year", example=0.01, ge=-10.0, le=10.0
    )
    dividend_yield: float = described(
        "Continuous dividend yield (0.02 is 2 %).", unit="decimals per year", example=0.02, ge=-10.0, le=10.0
    )


class SliceAsked(Asked):
    """One expiry with its strikes. Forward and discount factor stand here, or follow from ``market``."""

    forward: float | None = described(
        "Forward price for delivery at expiry. Given here together with discount_factor, or not at all where market "
        "is given.",
        unit="price of one underlying",
        example=99.0,
        default=None,
        **FORWARD_LIMITS,
    )
    discount_factor: float | None = described(
        "Value now of one unit of money paid at expiry.",
        unit="money now per money at expiry",
        example=0.99,
        default=None,
        **DISCOUNT_LIMITS,
    )
    strikes: Strikes = described(
        "Strikes in any order, repeats allowed; answers keep the order.",
        unit="price of one underlying",
        example=[80.0, 100.0, 120.0],
    )


class SmileTerms(Asked):
    """What a request says once for all of its slices."""

    market: MarketAsked | None = described(
        "A flat market for slices that give no forward and discount factor.",
        unit="none",
        example={"spot": 100.0, "rate": 0.01, "dividend_yield": 0.02},
        default=None,
    )
    valuation_date: date | None = described(
        "The day from which expiries given as dates are counted.",
        unit="date YYYY-MM-DD",
        example="2026-03-16",
        default=None,
    )
    day_count: DayCount = described(
        "How two dates become years: ACT/365F, ACT/360 or ACT/ACT (ISDA).",
        unit="none",
        example="ACT/365F",
        default="ACT/365F",
    )


class WarningAnswer(Answer):
    """A value that is admitted but looks like a slip of units."""

    pointer: str = described("JSON Pointer into the body sent.", unit="none", example="/market/rate")
    detail: str = described(
        "What looks odd about it.",
        unit="none",
        example="is 500 % a year: rates are decimals per year, 0.05 is 5 %",
    )
