"""Which quotes of a chain are wrong, and in which way: one set of flags per call and per put.

Definitions (``lower`` is the no-arbitrage minimum ``D (F - K)^+`` of a call, ``D (K - F)^+`` of a put; every comparison with
forward or discount factor grants ``slack`` standard errors of them):

- ``crossed``: bid above ask. A locked quote (bid equal to ask) is not crossed.
- ``no_bid``: an ask, and no bid or a bid of zero. ``no_ask``: a bid and no ask.
- ``below_intrinsic``: the *ask* is below ``lower``, so that buying and hedging with the forward earns at once.
  (A midpoint below ``lower`` with the ask above it is no fault of the quote: it has no volatility, and its status says so.)
- ``parity_outlier``: the pair was left out of the parity regression, and this leg is the one further from the
  time value of its good neighbours, interpolated in the strike; both legs where the distances are alike (within a factor
  of two) or there are no good neighbours on both sides.
- ``vertical_arbitrage``, ``butterfly_arbitrage``, ``calendar_arbitrage``: see ``engine.market.arbitrage``; crossed quotes
  are not held against others. A bid above the maximum (``D F`` for a call, ``D K`` for a put) is vertical, against strike zero.
- ``wide``: the spread is above ``wide_fraction`` of the midpoint, or above ``wide_multiple`` times the median spread of the nine
  nearest quotes of its side. Defaults 0.75 (a market of one tick bid, two ticks asked has 2/3 and is not wide) and 4
  (common practice, no source).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from engine.arrays import Floats
from engine.market.arbitrage import Side, butterfly, calendar, vertical
from engine.market.chain import Bools, ChainExpiry, FlagCodes, QuoteFlag
from engine.market.forwards import ForwardFit

__all__ = ["SLACK", "WIDE_FRACTION", "WIDE_MULTIPLE", "ExpiryFlags", "flag_chain"]

WIDE_FRACTION: Final = 0.75  # see the module docstring
WIDE_MULTIPLE: Final = 4.0  # common practice, no source
SLACK: Final = 2.0  # standard errors: 95 % under a normal law
_NEIGHBOURS: Final = 9  # quotes whose median spread is the usual one; odd, so that the median is a quote's
_CLEAR: Final = 2.0  # ratio of distances from which one leg of a pair is blamed alone; common practice, no source


@dataclass(frozen=True, slots=True)
class ExpiryFlags:
    """Bits of ``QuoteFlag`` per strike (n,), in the order of the chain."""

    calls: FlagCodes
    puts: FlagCodes


def flag_chain(
    expiries: Sequence[ChainExpiry],
    fits: Sequence[ForwardFit],
    *,
    wide_fraction: float = WIDE_FRACTION,
    wide_multiple: float = WIDE_MULTIPLE,
    slack: float = SLACK,
) -> list[ExpiryFlags]:
    """Flags of every quote of ``expiries``, given the parity fit of each. Never raises for what the quotes are like."""
    out = [ExpiryFlags(np.zeros(chain.size, np.uint16), np.zeros(chain.size, np.uint16)) for chain in expiries]
    for chain, fit, flags in zip(expiries, fits, out, strict=True):
        blamed_calls, blamed_puts = _blamed_legs(chain, fit)
        _set(flags.calls, QuoteFlag.PARITY_OUTLIER, blamed_calls)
        _set(flags.puts, QuoteFlag.PARITY_OUTLIER, blamed_puts)
        maximum = fit.discount_factor * (fit.forward + slack * fit.forward_uncertainty)
        line = fit.discount_factor * (fit.forward - chain.strikes)
        margin = slack * fit.line_errors
        for codes, bids, asks, side, lower, upper in (
            (flags.calls, chain.call_bids, chain.call_asks, Side.calls, line, np.full(chain.size, maximum)),
            (flags.puts, chain.put_bids, chain.put_asks, Side.puts, -line, fit.discount_factor * chain.strikes),
        ):
            _set(codes, QuoteFlag.CROSSED, bids > asks)
            _set(codes, QuoteFlag.NO_BID, ~np.isnan(asks) & ~(bids > 0.0))
            _set(codes, QuoteFlag.NO_ASK, (bids > 0.0) & np.isnan(asks))
            _set(codes, QuoteFlag.WIDE, _wide(chain.strikes, bids, asks, wide_fraction, wide_multiple))
            rounding = 8.0 * np.finfo(np.float64).eps * fit.discount_factor * (fit.forward + chain.strikes)
            _set(codes, QuoteFlag.BELOW_INTRINSIC, asks < np.maximum(lower, 0.0) - margin - rounding)
            uncrossed = side(chain.strikes, bids, asks)
            steep = slack * fit.discount_factor_uncertainty
            found = vertical(uncrossed, chain.size, discount_factor=fit.discount_factor, bound_slack=steep)
            relative = slack * fit.discount_factor_uncertainty / fit.discount_factor
            over = (bids > upper * (1.0 + relative) + rounding) & ~(bids > asks)
            _set(codes, QuoteFlag.VERTICAL_ARBITRAGE, found | over)
            _set(codes, QuoteFlag.BUTTERFLY_ARBITRAGE, butterfly(uncrossed, chain.size))
    _flag_calendar(expiries, fits, out, slack)
    return out


def _set(codes: FlagCodes, flag: QuoteFlag, where: Bools) -> None:
    codes[where] |= np.uint16(flag)


def _wide(strikes: Floats, bids: Floats, asks: Floats, fraction: float, multiple: float) -> Bools:
    quoted = np.flatnonzero((bids > 0.0) & (asks >= bids))
    out = np.zeros(strikes.size, dtype=np.bool_)
    if not quoted.size:
        return out
    quoted = quoted[np.argsort(strikes[quoted], kind="stable")]
    spreads = (asks - bids)[quoted]
    reach = min(_NEIGHBOURS, int(spreads.size))
    windows = np.lib.stride_tricks.sliding_window_view(spreads, reach)
    first = np.clip(np.arange(spreads.size) - reach // 2, 0, spreads.size - reach)
    usual = np.median(windows, axis=1)[first]
    middle = 0.5 * (bids + asks)[quoted]
    out[quoted] = (spreads > fraction * middle) | ((usual > 0.0) & (spreads > multiple * usual))
    return out


def _blamed_legs(chain: ChainExpiry, fit: ForwardFit) -> tuple[Bools, Bools]:
    """Which leg of each outlying pair is at fault: the one further from its good neighbours' time value."""
    outliers = fit.outliers
    if not outliers.any():
        return outliers, outliers
    line = fit.discount_factor * (fit.forward - chain.strikes)
    from_calls = chain.call_mids - np.maximum(line, 0.0)
    from_puts = chain.put_mids - np.maximum(-line, 0.0)
    good = np.flatnonzero(chain.paired & ~outliers)
    if good.size < 2:
        return outliers, outliers
    good = good[np.argsort(chain.strikes[good], kind="stable")]
    neighbours = 0.5 * (from_calls + from_puts)[good]
    expected = np.interp(chain.strikes, chain.strikes[good], neighbours, left=np.nan, right=np.nan)
    calls_off, puts_off = np.abs(from_calls - expected), np.abs(from_puts - expected)
    puts_clear = calls_off * _CLEAR < puts_off
    calls_clear = puts_off * _CLEAR < calls_off
    return outliers & ~puts_clear, outliers & ~calls_clear


def _flag_calendar(
    expiries: Sequence[ChainExpiry], fits: Sequence[ForwardFit], out: Sequence[ExpiryFlags], slack: float
) -> None:
    known = [i for i, fit in enumerate(fits) if fit.known]
    if len(known) < 2:
        return
    years = np.array([expiries[i].expiry for i in known])
    errors = np.array(
        [
            [
                fits[i].forward_uncertainty / fits[i].forward,
                fits[i].discount_factor_uncertainty / fits[i].discount_factor,
            ]
            for i in known
        ]
    )
    sizes = [expiries[i].size for i in known]
    slacks = np.full(len(known), slack)
    calls, puts = [], []
    for i in known:
        chain, unit = expiries[i], fits[i].discount_factor * fits[i].forward
        moneyness = chain.strikes / fits[i].forward
        calls.append(Side.calls(moneyness, chain.call_bids / unit, chain.call_asks / unit))
        puts.append(Side.puts(moneyness, chain.put_bids / unit, chain.put_asks / unit))
    for sides, of_calls in ((calls, True), (puts, False)):
        accused = calendar(sides, sizes, expiries=years, scales=errors, slacks=slacks)
        for i, rows in zip(known, accused, strict=True):
            _set(out[i].calls if of_calls else out[i].puts, QuoteFlag.CALENDAR_ARBITRAGE, rows)
