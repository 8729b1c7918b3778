"""An option chain, as a schema and as what the engine takes."""

from __future__ import annotations

from datetime import date
from typing import Annotated, Any, Final, TypeAlias

import numpy as np
from pydantic import Field

from engine import ChainExpiry
from service.fields import Asked, Finite, Strikes, described
from service.terms.mapping import Faults, expiry_years
from service.terms.schemas import DISCOUNT_LIMITS, FORWARD_LIMITS, DayCount, QuotedExpiry

__all__ = ["EXAMPLE", "ChainAsked", "ChainExpiryAsked", "Quotes", "check_chain", "engine_chain"]

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
Quotes: TypeAlias = Annotated[list[Finite | None], Field(min_length=1, fail_fast=True)]


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


_COLUMNS: Final = ("call_bids", "call_asks", "put_bids", "put_asks")


def check_chain(asked: ChainAsked, faults: Faults) -> list[float]:
    """Years to every expiry; columns of other lengths and dates without a valuation date are noted as faults."""
    years = []
    for i, one in enumerate(asked.expiries):
        years.append(expiry_years(asked, one.expiry, faults, "expiries", i, "expiry"))
        for name in _COLUMNS:
            if len(getattr(one, name)) != len(one.strikes):
                detail = f"has {len(getattr(one, name))} entries for {len(one.strikes)} strikes; give one per strike"
                faults.add(detail, "expiries", i, name)
    return years


def engine_chain(asked: ChainAsked, years: list[float]) -> list[ChainExpiry]:
    """The engine's chain."""
    return [_engine_expiry(one, tau) for one, tau in zip(asked.expiries, years, strict=True)]


def _engine_expiry(asked: ChainExpiryAsked, years: float) -> ChainExpiry:
    columns = {name: np.array(getattr(asked, name), dtype=np.float64) for name in _COLUMNS}  # None becomes NaN
    return ChainExpiry(
        expiry=years,
        strikes=np.array(asked.strikes, dtype=np.float64),
        forward=asked.forward,
        discount_factor=asked.discount_factor,
        **columns,
    )
