"""Which quotes of a chain are wrong, and in which way: one set of flags per call and per put.

Definitions (``lower`` is the no-arbitrage minimum ``D (F - K)^+`` of a call, ``D (K - F)^+`` of a put; every comparison
with a fitted forward or discount factor grants ``slack`` standard errors of it):

- ``crossed``: bid above ask. A locked quote (bid equal to ask) is not crossed.
- ``no_bid``: an ask, and no bid or a bid of zero. ``no_ask``: a bid and no ask. Where neither is quoted there is no
  quote and no flag.
- ``below_intrinsic``: the *ask* is below ``lower``, so that buying and hedging with the forward earns at once.
  (A midpoint below ``lower`` with the ask above it is no fault of the quote: it has no volatility, and its status
  says so.)
- ``parity_outlier``: the pair was left out of the parity regression, and this leg is the one further from its good
  neighbours: as a call value (the put's by parity, so that nothing bends at the forward), interpolated in the strike;
  both legs where the distances are alike (within a factor of two) or there are no good neighbours on both sides.
- ``vertical_arbitrage``, ``butterfly_arbitrage``, ``calendar_arbitrage``: see ``engine.market.arbitrage``; crossed
  quotes are not held against others, and a quote with one of the flags before is to blame before one without. A bid
  above the maximum (``D F`` for a call, ``D K`` for a put) is vertical, against strike zero.
- ``wide``: the spread is above ``WIDE_FRACTION`` of the midpoint, or above ``WIDE_MULTIPLE`` times the median spread of
  the nine nearest two-sided quotes of its side and expiry, itself among them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from engine.arrays import Floats, Ints
from engine.market.arbitrage import butterfly, calendar, vertical
from engine.market.chain import Bools, ChainExpiry, FlagCodes, QuoteFlag
from engine.market.forwards import ForwardFit
from engine.market.ladder import Ladder

__all__ = ["SLACK", "WIDE_FRACTION", "WIDE_MULTIPLE", "ExpiryFlags", "flag_chain"]

WIDE_FRACTION: Final = 0.75  # a market of one tick bid, two asked has 2/3 and is not wide; common practice, no source
WIDE_MULTIPLE: Final = 4.0  # common practice, no source
SLACK: Final = 2.0  # standard errors: 95 % under a normal law
_NEIGHBOURS: Final = 9  # quotes whose median spread is the usual one; odd, so that the median is a quote's
_CLEAR: Final = 2.0  # ratio of distances from which one leg of a pair is blamed alone; common practice, no source
_ROUNDING: Final = 8.0 * float(np.finfo(np.float64).eps)  # of the largest term of D (F - K)


@dataclass(frozen=True, slots=True)
class ExpiryFlags:
    """Bits of ``QuoteFlag`` per strike (n,), in the order of the chain."""

    calls: FlagCodes
    puts: FlagCodes


@dataclass(frozen=True, slots=True)
class _Chain:
    """All expiries end to end: per row (n,) strike, expiry number and margin of the parity line; per expiry (m,) the
    rest, ``forward`` and ``discount`` NaN where unknown. Margins are ``slack`` standard errors, 0 for given values."""

    strikes: Floats
    expiries: Ints
    line_margin: Floats
    years: Floats
    forward: Floats
    discount: Floats
    forward_margin: Floats
    discount_margin: Floats


def flag_chain(
    expiries: Sequence[ChainExpiry], fits: Sequence[ForwardFit], *, slack: float = SLACK
) -> list[ExpiryFlags]:
    """Flags of every quote of ``expiries``, given the parity fit of each. Never raises for what the quotes are like."""
    if not expiries:
        return []
    chain = _end_to_end(expiries, fits, slack)
    blamed = [_blamed_legs(one, fit) for one, fit in zip(expiries, fits, strict=True)]
    columns = {
        name: np.concatenate([getattr(one, name) for one in expiries])
        for name in ("call_bids", "call_asks", "put_bids", "put_asks")
    }
    call_legs, put_legs = (np.concatenate([getattr(legs, kind) for legs in blamed]) for kind in ("calls", "puts"))
    calls = _flag_side(chain, columns["call_bids"], columns["call_asks"], call_legs, calls=True)
    puts = _flag_side(chain, columns["put_bids"], columns["put_asks"], put_legs, calls=False)
    ends = np.cumsum([one.size for one in expiries])[:-1]
    return [ExpiryFlags(c, p) for c, p in zip(np.split(calls, ends), np.split(puts, ends), strict=True)]


def _end_to_end(expiries: Sequence[ChainExpiry], fits: Sequence[ForwardFit], slack: float) -> _Chain:
    return _Chain(
        strikes=np.concatenate([one.strikes for one in expiries]),
        expiries=np.repeat(np.arange(len(expiries), dtype=np.int64), [one.size for one in expiries]),
        line_margin=slack * np.concatenate([fit.line_errors for fit in fits]),
        years=np.array([one.expiry for one in expiries]),
        forward=np.array([fit.forward if fit.known else np.nan for fit in fits]),
        discount=np.array([fit.discount_factor if fit.known else np.nan for fit in fits]),
        forward_margin=slack * np.array([fit.forward_uncertainty for fit in fits]),
        discount_margin=slack * np.array([fit.discount_factor_uncertainty for fit in fits]),
    )


def _flag_side(chain: _Chain, bids: Floats, asks: Floats, outliers: Bools, *, calls: bool) -> FlagCodes:
    """Every flag for the calls or the puts (n,) of all expiries; the suspicion grows from one arbitrage to the next."""
    e = chain.expiries
    forward, discount = chain.forward[e], chain.discount[e]
    line = discount * (forward - chain.strikes)
    rounding = _ROUNDING * discount * (forward + chain.strikes)
    lower = np.maximum(line if calls else -line, 0.0)
    dearest = forward + chain.forward_margin[e] if calls else chain.strikes
    upper = (discount + chain.discount_margin[e]) * dearest
    side = Ladder.calls if calls else Ladder.puts
    ladder = side(chain.strikes, bids, asks, e)
    unit = discount * forward
    normalised = side(chain.strikes / forward, bids / unit, asks / unit, e)
    uncertainties = np.column_stack([chain.forward_margin / chain.forward, chain.discount_margin / chain.discount])
    low = asks < lower - chain.line_margin - rounding
    suspects = low | outliers
    steep = vertical(ladder, discount_factors=chain.discount + chain.discount_margin, suspects=suspects)
    steep |= (bids > upper + rounding) & ~(bids > asks)
    suspects |= steep
    bent = butterfly(ladder, suspects=suspects)
    suspects |= bent
    falling = calendar(normalised, years=chain.years, uncertainties=uncertainties, suspects=suspects)
    codes = np.zeros(bids.size, dtype=np.uint16)
    _set(codes, QuoteFlag.CROSSED, bids > asks)
    _set(codes, QuoteFlag.NO_BID, ~np.isnan(asks) & ~(bids > 0.0))
    _set(codes, QuoteFlag.NO_ASK, (bids > 0.0) & np.isnan(asks))
    _set(codes, QuoteFlag.BELOW_INTRINSIC, low)
    _set(codes, QuoteFlag.PARITY_OUTLIER, outliers)
    _set(codes, QuoteFlag.VERTICAL_ARBITRAGE, steep)
    _set(codes, QuoteFlag.BUTTERFLY_ARBITRAGE, bent)
    _set(codes, QuoteFlag.CALENDAR_ARBITRAGE, falling)
    _set(codes, QuoteFlag.WIDE, _wide(chain, bids, asks))
    return codes


def _set(codes: FlagCodes, flag: QuoteFlag, where: Bools) -> None:
    codes[where] |= np.uint16(flag)


def _wide(chain: _Chain, bids: Floats, asks: Floats) -> Bools:
    rows = np.flatnonzero((bids > 0.0) & (asks >= bids))
    rows = rows[np.lexsort((chain.strikes[rows], chain.expiries[rows]))]
    out = np.zeros(bids.size, dtype=np.bool_)
    if not rows.size:
        return out
    of = chain.expiries[rows]
    start, end = np.searchsorted(of, of, side="left"), np.searchsorted(of, of, side="right")
    spreads = (asks - bids)[rows]
    first = np.maximum(np.minimum(np.arange(rows.size) - _NEIGHBOURS // 2, end - _NEIGHBOURS), start)
    window = first[:, None] + np.arange(_NEIGHBOURS)
    around = np.where(window < end[:, None], spreads[np.minimum(window, rows.size - 1)], np.inf)
    around.sort(axis=1)
    count, here = np.minimum(end - start, _NEIGHBOURS), np.arange(rows.size)
    usual = 0.5 * (around[here, (count - 1) // 2] + around[here, count // 2])
    middle = 0.5 * (bids + asks)[rows]
    out[rows] = (spreads > WIDE_FRACTION * middle) | ((usual > 0.0) & (spreads > WIDE_MULTIPLE * usual))
    return out


@dataclass(frozen=True, slots=True)
class _Legs:
    calls: Bools
    puts: Bools


def _blamed_legs(chain: ChainExpiry, fit: ForwardFit) -> _Legs:
    """Which leg of each outlying pair is at fault: the one further, as a call, from its good neighbours."""
    outliers = fit.outliers
    good = np.flatnonzero(chain.paired & ~outliers)
    if not outliers.any() or good.size < 2:
        return _Legs(outliers, outliers)
    from_calls = chain.call_mids
    from_puts = chain.put_mids + fit.discount_factor * (fit.forward - chain.strikes)
    good = good[np.argsort(chain.strikes[good], kind="stable")]
    neighbours = 0.5 * (from_calls + from_puts)[good]
    expected = np.interp(chain.strikes, chain.strikes[good], neighbours, left=np.nan, right=np.nan)
    calls_off, puts_off = np.abs(from_calls - expected), np.abs(from_puts - expected)
    puts_clear = calls_off * _CLEAR < puts_off
    calls_clear = puts_off * _CLEAR < calls_off
    return _Legs(outliers & ~puts_clear, outliers & ~calls_clear)
