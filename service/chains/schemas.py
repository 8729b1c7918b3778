"""Answer of ``POST /v1/chains``; its request is a common object (``service.terms.chain``)."""

from __future__ import annotations

from typing import Any, Final, Literal, TypeAlias

from service.fields import Answer, described

__all__ = ["ChainAnswer"]

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
