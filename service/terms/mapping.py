"""From the common objects of a request to what the engine takes: years, forwards, discount factors, payoff codes.

Faults are gathered over the whole request before anything is refused, so that a caller sees all of them at once.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import date
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from engine import EXPIRY_RANGE, Payoff, year_fraction
from service.problems import Fault, Problem, over_limit, pointer
from service.settings import Settings
from service.terms.schemas import DISCOUNT_RANGE, FORWARD_RANGE, LATEST, MarketAsked, SmileTerms

__all__ = ["Faults", "SliceTerms", "check_sizes", "expiry_years", "payoff_codes", "resolve"]

_CODES: Final = {payoff.word: int(payoff) for payoff in Payoff}


@dataclass(slots=True)
class Faults:
    """Faults found so far. ``place``: where in the body the paths begin."""

    found: list[Fault] = field(default_factory=list)
    place: tuple[str | int, ...] = ()

    def add(self, detail: str, *at: str | int) -> None:
        """Note what is wrong with the value at a path."""
        self.found.append(Fault(pointer(*self.place, *at), detail))

    def under(self, *at: str | int) -> Faults:
        """The same faults, for an object that stands at a path."""
        return Faults(self.found, (*self.place, *at))

    def refuse(self) -> None:
        """Raise Problem if there are any."""
        if len(self.found) == 1:
            raise Problem("invalid-request", f"{self.found[0].pointer} {self.found[0].detail}.", faults=self.found)
        if self.found:
            raise Problem("invalid-request", f"{len(self.found)} values are at fault.", faults=self.found)


class _HasStrikes(Protocol):
    """A slice or an expiry of a request."""

    @property
    def strikes(self) -> list[float]: ...


class _HasTerms(_HasStrikes, Protocol):
    """A slice of a request with all that fixes its market."""

    @property
    def expiry(self) -> float | date: ...
    @property
    def forward(self) -> float | None: ...
    @property
    def discount_factor(self) -> float | None: ...


class _HasDates(Protocol):
    """A request whose expiries may be dates."""

    @property
    def valuation_date(self) -> date | None: ...
    @property
    def day_count(self) -> str: ...


@dataclass(frozen=True, slots=True)
class SliceTerms:
    """Expiry in years, forward and discount factor of one slice."""

    expiry: float
    forward: float
    discount_factor: float


def check_sizes(slices: Sequence[_HasStrikes], settings: Settings, *, name: str = "slices") -> int:
    """Strikes in all; raises Problem ``limit-exceeded`` when there are too many slices or strikes."""
    if len(slices) > settings.max_slices:
        raise over_limit(name, f"has {len(slices)} entries", settings.max_slices, "MAX_SLICES")
    strikes = sum(len(one.strikes) for one in slices)
    if strikes > settings.max_strikes:
        raise over_limit(name, f"has {strikes} strikes in all", settings.max_strikes, "MAX_STRIKES")
    return strikes


def expiry_years(terms: _HasDates, expiry: float | date, faults: Faults, *at: str | int) -> float:
    """Years to expiry; NaN with a fault noted where a date has no valuation date or is too far away."""
    if not isinstance(expiry, date):
        return expiry
    if terms.valuation_date is None:
        faults.add(f"is required: {pointer(*faults.place, *at)} is a date", "valuation_date")
        return math.nan
    years = year_fraction(terms.valuation_date, expiry, day_count=terms.day_count)
    if abs(years) > LATEST:
        faults.add(f"is {years:.6g} years from the valuation date; must be at most {LATEST:g}", *at)
        return math.nan
    return years


def resolve(terms: SmileTerms, slices: Sequence[_HasTerms], faults: Faults, *, alive: bool) -> list[SliceTerms]:
    """Terms of every slice; ``alive`` demands an expiry that can be priced. Values under a fault are NaN."""
    out = []
    for i, one in enumerate(slices):
        years = expiry_years(terms, one.expiry, faults, "slices", i, "expiry")
        if alive and years < EXPIRY_RANGE[0]:
            detail = f"is {years:.6g} years after the valuation date; must be at least {EXPIRY_RANGE[0]:.6g} (one hour)"
            faults.add(detail, "slices", i, "expiry")
        out.append(_terms(terms.market, one, years, i, faults))
    return out


def _terms(market: MarketAsked | None, one: _HasTerms, years: float, i: int, faults: Faults) -> SliceTerms:
    if market is None:
        for name in ("forward", "discount_factor"):
            if getattr(one, name) is None:
                faults.add("is required where no market is given", "slices", i, name)
        return SliceTerms(years, one.forward or math.nan, one.discount_factor or math.nan)
    for name in ("forward", "discount_factor"):
        if getattr(one, name) is not None:
            faults.add("is given, and market too, from which it would follow: give one of them", "slices", i, name)
    forward = _scaled(market.spot, (market.rate - market.dividend_yield) * years, FORWARD_RANGE)
    discount = _scaled(1.0, -market.rate * years, DISCOUNT_RANGE)
    for value, name, (low, high) in (
        (forward, "forward", FORWARD_RANGE),
        (discount, "discount factor", DISCOUNT_RANGE),
    ):
        if math.isnan(value) and not math.isnan(years):
            faults.add(f"gives slice {i} a {name} outside {low:g} to {high:g}", "market")
    return SliceTerms(years, forward, discount)


def _scaled(start: float, growth: float, limits: tuple[float, float]) -> float:
    """``start exp(growth)``; NaN outside the limits, so that it never overflows."""
    inside = math.log(limits[0]) <= math.log(start) + growth <= math.log(limits[1])
    return start * math.exp(growth) if inside else math.nan


def payoff_codes(payoff: str | Sequence[str], count: int, faults: Faults, *at: str | int) -> NDArray[np.uint8]:
    """One code of ``engine.Payoff`` per strike, (count,), from one word or one per strike."""
    if isinstance(payoff, str):
        return np.full(count, _CODES[payoff], dtype=np.uint8)
    if len(payoff) != count:
        faults.add(f"has {len(payoff)} entries for {count} strikes; give one word, or one per strike", *at)
        return np.zeros(count, dtype=np.uint8)
    return np.array([_CODES[word] for word in payoff], dtype=np.uint8)
