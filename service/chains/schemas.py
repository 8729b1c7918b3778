"""Request and answer of ``POST /v1/chains``."""

from __future__ import annotations

from datetime import date
from typing import Annotated, Any, Final, Literal, TypeAlias

from pydantic import Field

from service.fields import Answer, Asked, Finite, Strikes, described
from service.terms.schemas import DISCOUNT_LIMITS, FORWARD_LIMITS, DayCount, QuotedExpiry

__all__ = ["EXAMPLE", "ChainAnswer", "ChainAsked", "ChainExpiryAsked"]

# Invented quotes. Put-call parity with forward 100.5 and discount factor 0.99; the call at 90 is stale, the put at 110
# is crossed.
EXAMPLE: Final[dict[str, Any]] = {
    "valuation_date": "2026-03-16",
    "spot": 100.0,
    "expiries": [
        {
            "expiry": "2026-09-18",
            "strikes": [90.0, 95.0, 100.0, 105.0, 110.0],
            "call_bids": [14.1, 8.8, 5.8, 3.5, 1.9],
            "call_asks": [14.3, 9.0, 6.0, 3.7, 2.1],
            "put_bids": [1.9, 3.35, 5.3, 7.95, 11.6],
            "put_asks": [2.1, 3.55, 5.5, 8.15, 11.3],
        }
    ],
}
_EXPIRY: Final[dict[str, Any]] = {
    "expiry": 0.5095890410958904,
    "strikes": [95.0, 110.0],
    "status": "fitted",
    "forward": 100.5,
    "discount_factor": 0.99,
    "forward_standard_error": 0.05,
    "discount_factor_standard_error": 0.012,
    "rate": 0.01972,
    "dividend_yield": 0.00994,
    "pairs": 2,
    "pairs_used": 2,
    "rms_residual": 0.01,
    "payoffs": ["put", "call"],
    "implied_vols": {"bid": [0.206, 0.18], "mid": [0.21, 0.184], "ask": [0.214, 0.189]},
    "statuses": {"bid": ["ok", "ok"], "mid": ["ok", "ok"], "ask": ["ok", "ok"]},
    "flags": {"calls": [[], []], "puts": [[], ["wide"]]},
    "usable": [True, True],
    "warnings": [],
}
_TOTALS: Final[dict[str, Any]] = {
    "expiries": 1,
    "expiries_without_forward": 0,
    "strikes": 2,
    "quotes": 4,
    "two_sided": 4,
    "flagged": 1,
    "by_flag": {"crossed": 0, "wide": 1},
    "usable": 2,
    "pairs": 2,
    "pairs_used": 2,
    "impossible_quotes": 0,
}
Quotes: TypeAlias = Annotated[list[Finite | None], Field(min_length=1, fail_fast=True)]
VolStatus: TypeAlias = Literal[
    "ok", "below_intrinsic", "above_maximum", "zero_time_value", "not_finite", "expired", "no_quote"
]
Flag: TypeAlias = Literal[
    "crossed",
    "no_bid",
    "below_intrinsic",
    "parity_outlier",
    "vertical_arbitrage",
    "butterfly_arbitrage",
    "calendar_arbitrage",
    "wide",
    "no_ask",
]


def _quotes(what: str, example: list[float | None]) -> Any:
    text = f"{what}, one per strike, as quoted; null where there is no quote. Negative is taken as no quote."
    return described(text, unit="price of one underlying", example=example)


class ChainExpiryAsked(Asked):
    """Quotes of European options of one expiry."""

    expiry: QuotedExpiry = described(
        "Time to expiry: years; or a date, counted from valuation_date. Zero or less has status expired.",
        unit="years, or date YYYY-MM-DD",
        example="2026-09-18",
    )
    strikes: Strikes = described(
        "Strikes in any order, repeats allowed; answers keep the order.",
        unit="price of one underlying",
        example=[95.0, 100.0],
    )
    call_bids: Quotes = _quotes("Bids of the calls", [8.8, 5.8])
    call_asks: Quotes = _quotes("Asks of the calls", [9.0, 6.0])
    put_bids: Quotes = _quotes("Bids of the puts", [3.35, None])
    put_asks: Quotes = _quotes("Asks of the puts", [3.55, 5.5])
    forward: float | None = described(
        "The forward, if it is known; inferred from put-call parity otherwise.",
        unit="price of one underlying",
        example=100.5,
        default=None,
        **FORWARD_LIMITS,
    )
    discount_factor: float | None = described(
        "The discount factor, if it is known; inferred from put-call parity otherwise.",
        unit="money now per money at expiry",
        example=0.99,
        default=None,
        **DISCOUNT_LIMITS,
    )


class ChainAsked(Asked):
    """Turn an option chain into a quoted surface."""

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
    spot: float | None = described(
        "Price of the underlying now; used only to state the dividend yields that the forwards imply.",
        unit="price of one underlying",
        example=100.0,
        default=None,
        **FORWARD_LIMITS,
    )
    expiries: Annotated[list[ChainExpiryAsked], Field(min_length=1)] = described(
        "The expiries, in any order.", unit="none", example=EXAMPLE["expiries"]
    )


class BidMidAskVols(Answer):
    """Volatilities of the out-of-the-money side at each strike; null where the status says why."""

    bid: list[float | None] = described("Of the bid.", unit="per square root of a year", example=[0.21, None])
    mid: list[float | None] = described(
        "Of the midpoint of bid and ask.", unit="per square root of a year", example=[0.215, None]
    )
    ask: list[float | None] = described("Of the ask.", unit="per square root of a year", example=[0.22, None])


class BidMidAskStatuses(Answer):
    """Why a volatility is there or not."""

    bid: list[VolStatus] = described("Of the bid.", unit="none", example=["ok", "no_quote"])
    mid: list[VolStatus] = described("Of the midpoint.", unit="none", example=["ok", "no_quote"])
    ask: list[VolStatus] = described("Of the ask.", unit="none", example=["ok", "no_quote"])


class QuoteFlags(Answer):
    """What is wrong with each quote; an empty list where nothing is."""

    calls: list[list[Flag]] = described("Of the calls.", unit="none", example=[["parity_outlier"], []])
    puts: list[list[Flag]] = described("Of the puts.", unit="none", example=[[], ["crossed"]])


class ExpiryAnswer(Answer):
    """One expiry; columns in the order of the strikes sent."""

    expiry: float = described("Time to expiry.", unit="years", example=0.5095890410958904)
    strikes: list[float] = described("Strikes as sent.", unit="price of one underlying", example=[95.0, 100.0])
    status: Literal["fitted", "given", "too_few_pairs", "degenerate", "expired"] = described(
        "Where forward and discount factor come from, or why they are null.", unit="none", example="fitted"
    )
    forward: float | None = described(
        "The forward, as given or inferred.", unit="price of one underlying", example=100.5
    )
    discount_factor: float | None = described(
        "The discount factor, as given or inferred.", unit="money now per money at expiry", example=0.99
    )
    forward_standard_error: float | None = described(
        "One standard error of the forward; null if it was given or there is no basis for one.",
        unit="price of one underlying",
        example=0.03,
    )
    discount_factor_standard_error: float | None = described(
        "One standard error of the discount factor; null if it was given or there is no basis for one.",
        unit="money now per money at expiry",
        example=0.004,
    )
    rate: float | None = described(
        "Continuous rate that the discount factor implies.", unit="decimals per year", example=0.0197
    )
    dividend_yield: float | None = described(
        "Continuous dividend yield that spot, forward and rate imply; null without spot.",
        unit="decimals per year",
        example=0.0099,
    )
    pairs: int = described("Strikes with call and put both quoted on both sides.", unit="count", example=5)
    pairs_used: int = described("Pairs the parity line rests on.", unit="count", example=3)
    rms_residual: float | None = described(
        "Root mean square of call - put - discount_factor (forward - strike) over the pairs used.",
        unit="price of one underlying",
        example=0.02,
    )
    payoffs: list[Literal["call", "put", "otm"]] = described(
        "The out-of-the-money side at each strike; otm where the forward is not known.",
        unit="none",
        example=["put", "put"],
    )
    implied_vols: BidMidAskVols = described(
        "Volatilities of the out-of-the-money side.",
        unit="per square root of a year",
        example={"bid": [0.21, None], "mid": [0.215, None], "ask": [0.22, None]},
    )
    statuses: BidMidAskStatuses = described(
        "Statuses of the volatilities.",
        unit="none",
        example={"bid": ["ok", "no_quote"], "mid": ["ok", "no_quote"], "ask": ["ok", "no_quote"]},
    )
    flags: QuoteFlags = described(
        "Flags per quote: crossed (bid above ask); no_bid, no_ask; below_intrinsic (the ask is below the no-arbitrage "
        "minimum); parity_outlier (left out of the parity line); vertical_, butterfly_, calendar_arbitrage (between "
        "strikes or expiries, at executable prices); wide (a spread out of proportion).",
        unit="none",
        example={"calls": [[], []], "puts": [[], ["crossed"]]},
    )
    usable: list[bool] = described(
        "Whether the out-of-the-money quote is two-sided, has a volatility and no flag but perhaps wide.",
        unit="none",
        example=[True, False],
    )
    warnings: list[str] = described("What a reader of the fit should know.", unit="none", example=[])


class TotalsAnswer(Answer):
    """Counts over the chain."""

    expiries: int = described("Expiries sent.", unit="count", example=1)
    expiries_without_forward: int = described("Expiries whose forward could not be inferred.", unit="count", example=0)
    strikes: int = described("Strikes sent, all expiries together.", unit="count", example=5)
    quotes: int = described("Calls and puts with a bid or an ask.", unit="count", example=10)
    two_sided: int = described("Quotes with a positive bid and an ask.", unit="count", example=10)
    flagged: int = described("Quotes with any flag.", unit="count", example=2)
    by_flag: dict[Flag, int] = described(
        "Quotes per flag, every flag named.", unit="count", example={"crossed": 1, "parity_outlier": 1}
    )
    usable: int = described("Strikes whose out-of-the-money quote can be fitted to.", unit="count", example=4)
    pairs: int = described("Pairs of all expiries.", unit="count", example=4)
    pairs_used: int = described("Pairs the parity lines rest on.", unit="count", example=3)
    impossible_quotes: int = described("Negative quotes, taken as no quote.", unit="count", example=0)


class ChainAnswer(Answer):
    """Expiries in the order sent, and counts over all of them."""

    expiries: list[ExpiryAnswer] = described("One entry per expiry sent.", unit="none", example=[_EXPIRY])
    totals: TotalsAnswer = described("What there is in the whole chain.", unit="count", example=_TOTALS)
