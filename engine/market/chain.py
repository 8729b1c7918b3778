"""One expiry of an option chain as it is quoted, and the words for what is wrong with a quote."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import IntFlag
from functools import lru_cache
from typing import Final, TypeAlias

import numpy as np
from numpy.typing import NDArray

from engine.arrays import Floats, vector
from engine.errors import InputError

__all__ = ["DISCOUNT_FACTOR_RANGE", "PRICE_RANGE", "Bools", "ChainExpiry", "FlagCodes", "QuoteFlag", "flag_words"]

Bools: TypeAlias = NDArray[np.bool_]
FlagCodes: TypeAlias = NDArray[np.uint16]


PRICE_RANGE: Final = (1e-12, 1e15)  # forwards the engine prices; squares of prices stay far inside the double range
DISCOUNT_FACTOR_RANGE: Final = (1e-12, 1e3)  # what the engine prices


class QuoteFlag(IntFlag):
    """Faults of one quote (a call or a put at one strike), as bits; a clean quote has none. Definitions of each are in
    ``engine.market.cleaning``. ``NO_ASK`` tells a bid without an ask apart from no quote at all, which has no flag."""

    CROSSED = 1
    NO_BID = 2
    BELOW_INTRINSIC = 4
    PARITY_OUTLIER = 8
    VERTICAL_ARBITRAGE = 16
    BUTTERFLY_ARBITRAGE = 32
    CALENDAR_ARBITRAGE = 64
    WIDE = 128
    NO_ASK = 256

    @property
    def word(self) -> str:
        """The name of a single flag as it appears in answers, e.g. ``"no_bid"``."""
        return str(self.name).lower()


@lru_cache(maxsize=1024)
def flag_words(code: int) -> tuple[str, ...]:
    """The words of one flag code in the order of the enumeration; empty for a clean quote."""
    return tuple(flag.word for flag in QuoteFlag if code & flag)


@dataclass(frozen=True, slots=True)
class ChainExpiry:
    """Quotes of European options of one expiry, one row a strike.

    ``expiry`` in years (any number: one that is not positive is reported as expired, not refused); ``strikes`` (n,)
    within ``PRICE_RANGE``, any order, repeats allowed; the four quote columns (n,) in price units, discounted as
    quoted, NaN where there is no quote. ``forward`` (within ``PRICE_RANGE``) and ``discount_factor`` (within
    ``DISCOUNT_FACTOR_RANGE``): given values, or None to have them inferred. A quote that is negative or above the range
    is no quote: it becomes NaN and is counted in ``impossible``.

    Raises InputError naming the field when a column is not an array of numbers or of another length, or a strike, a
    given forward or a given discount factor is outside its range.
    """

    expiry: float
    strikes: Floats
    call_bids: Floats
    call_asks: Floats
    put_bids: Floats
    put_asks: Floats
    forward: float | None = None
    discount_factor: float | None = None
    impossible: int = field(init=False, default=0)

    def __post_init__(self) -> None:
        strikes = vector("strikes", self.strikes)
        wrong = np.flatnonzero(~((strikes >= PRICE_RANGE[0]) & (strikes <= PRICE_RANGE[1])))
        if wrong.size:
            at = int(wrong[0])
            raise InputError("strikes", f"is {float(strikes[at])!r}", index=(at,), allowed=_words(PRICE_RANGE))
        object.__setattr__(self, "strikes", strikes)
        impossible = 0
        for name in ("call_bids", "call_asks", "put_bids", "put_asks"):
            quotes = vector(name, getattr(self, name), length=strikes.size)
            bad = (quotes < 0.0) | (quotes > PRICE_RANGE[1])
            impossible += int(np.count_nonzero(bad))
            object.__setattr__(self, name, np.where(bad, np.nan, quotes))
        object.__setattr__(self, "impossible", impossible)
        for name, limits in (("forward", PRICE_RANGE), ("discount_factor", DISCOUNT_FACTOR_RANGE)):
            value = getattr(self, name)
            if value is not None and not limits[0] <= value <= limits[1]:
                raise InputError(name, f"is {value!r}", allowed=_words(limits))

    @property
    def size(self) -> int:
        """Number of strikes."""
        return int(self.strikes.size)

    @property
    def call_mids(self) -> Floats:
        """Midpoints of the calls, NaN unless both sides are quoted."""
        return 0.5 * (self.call_bids + self.call_asks)

    @property
    def put_mids(self) -> Floats:
        """Midpoints of the puts, NaN unless both sides are quoted."""
        return 0.5 * (self.put_bids + self.put_asks)

    @property
    def paired(self) -> Bools:
        """Strikes at which call and put both have a positive bid and an ask that is not below it."""
        calls = (self.call_bids > 0.0) & (self.call_asks >= self.call_bids)
        puts = (self.put_bids > 0.0) & (self.put_asks >= self.put_bids)
        return np.asarray(calls & puts, dtype=np.bool_)


def _words(limits: tuple[float, float]) -> str:
    return f"{limits[0]:g} to {limits[1]:g}"
