"""Slips of units that are admissible numbers: told in the answer, never refused.

The thresholds are common practice, no source: beyond them a value is far more often a slip (5 for 5 %, days for years,
a volatility for a variance) than a market.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from service.terms.mapping import SliceTerms
from service.terms.models import ModelAsked
from service.terms.schemas import MarketAsked

__all__ = ["warnings_of"]

_RATE: Final = 0.25
_YEARS: Final = 30.0
_VOLATILITY: Final = 2.0
_VARIANCE: Final = 1.0
_MONEYNESS: Final = 20.0


def warnings_of(
    *,
    market: MarketAsked | None,
    slices: Sequence[SliceTerms],
    strikes: Sequence[Sequence[float]],
    model: ModelAsked | None = None,
) -> list[dict[str, str]]:
    """What looks odd, as ``{pointer, detail}``."""
    out: list[dict[str, str]] = []
    if market is not None:
        for name in ("rate", "dividend_yield"):
            value = getattr(market, name)
            if abs(value) > _RATE:
                _add(out, f"/market/{name}", f"is {value:.0%} a year: rates are decimals per year, 0.05 is 5 %")
    if model is not None:
        _of_model(out, model)
    for i, (terms, column) in enumerate(zip(slices, strikes, strict=True)):
        if terms.expiry > _YEARS:
            _add(out, f"/slices/{i}/expiry", f"is {terms.expiry:g} years: 30 days are {30 / 365:.4f} years")
        if max(column) * _MONEYNESS < terms.forward or min(column) > _MONEYNESS * terms.forward:
            detail = f"are all more than {_MONEYNESS:g} times away from the forward {terms.forward:g}"
            _add(out, f"/slices/{i}/strikes", f"{detail}: both are in the unit of the underlying's price")
    return out


def _of_model(out: list[dict[str, str]], model: ModelAsked) -> None:
    volatility = vars(model).get("volatility", 0.0)
    if volatility > _VOLATILITY:
        _add(out, "/model/volatility", f"is {volatility:.0%}: volatilities are decimals, 0.2 is 20 %")
    places = {"/model": vars(model)}
    for i, factor in enumerate(vars(model).get("factors", ())):
        places[f"/model/factors/{i}"] = vars(factor)
    for at, values in places.items():
        for name in ("v0", "theta") if "v0" in values else ():
            variance = values[name]
            if variance > _VARIANCE:
                detail = f"is a variance, a volatility of {variance**0.5:.0%}: 0.04 is a volatility of 20 %"
                _add(out, f"{at}/{name}", detail)


def _add(out: list[dict[str, str]], at: str, detail: str) -> None:
    out.append({"pointer": at, "detail": detail})
