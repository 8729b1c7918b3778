"""From an option chain as quoted to a surface: forwards, volatilities with their spread, and what is wrong with what.

The composer of ``engine.market`` (parity regression, clean-up) and ``engine.black`` (inversion). Volatilities are those
of the out-of-the-money side: the call where ``K >= F``, else the put. The in-the-money side has the same volatility by
parity but loses its digits to the intrinsic value; what it knows enters through the forward.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from engine.arrays import Bytes, Floats
from engine.black import total_deviation
from engine.errors import InputError
from engine.market.chain import Bools, ChainExpiry, FlagCodes, QuoteFlag
from engine.market.cleaning import ExpiryFlags, flag_chain
from engine.market.forwards import ForwardFit, ForwardStatus, infer_forward
from engine.moneyness import log_moneyness
from engine.status import Payoff, Status

__all__ = ["QuotedVols", "Surface", "SurfaceExpiry", "SurfaceTotals", "build_surface"]


@dataclass(frozen=True, slots=True)
class QuotedVols:
    """Implied volatilities (n,) of one column of prices, NaN where ``statuses`` (n,), codes of ``Status``, says why."""

    vols: Floats
    statuses: Bytes


@dataclass(frozen=True, slots=True)
class SurfaceExpiry:
    """One expiry, columns (n,) in the order of the strikes sent.

    ``forward``, ``discount_factor``: as given or inferred, NaN where ``status`` says why; their standard errors are NaN
    for given values and where there is no basis for one. ``pairs`` strikes with call and put two-sided, ``pairs_used``
    of them in the fit; ``rms_residual`` of parity over those, price units. ``payoffs``: codes of ``Payoff``, the
    out-of-the-money side at each strike (``OTM`` itself where the forward is unknown). ``bid``, ``mid``, ``ask``: its
    volatilities. ``call_flags``, ``put_flags``: bits of ``QuoteFlag``. ``usable``: the out-of-the-money quote is
    two-sided, has a mid volatility and no flag but perhaps ``WIDE``. ``warnings`` in words.
    """

    expiry: float
    strikes: Floats
    forward: float
    discount_factor: float
    forward_error: float
    discount_factor_error: float
    pairs: int
    pairs_used: int
    rms_residual: float
    status: ForwardStatus
    warnings: tuple[str, ...]
    payoffs: Bytes
    bid: QuotedVols
    mid: QuotedVols
    ask: QuotedVols
    call_flags: FlagCodes
    put_flags: FlagCodes
    usable: Bools


@dataclass(frozen=True, slots=True)
class SurfaceTotals:
    """Counts over the chain. ``quotes``: calls and puts with a bid or an ask; ``two_sided`` with both, the bid above
    zero. ``flagged``: quotes with any flag; ``by_flag``: quotes per flag, every flag named, by its word. ``usable``:
    strikes whose out-of-the-money quote can be fitted to. ``impossible_quotes``: negative or infinite numbers, treated
    as no quote."""

    expiries: int
    expiries_without_forward: int
    strikes: int
    quotes: int
    two_sided: int
    flagged: int
    by_flag: dict[str, int]
    usable: int
    pairs: int
    pairs_used: int
    impossible_quotes: int


@dataclass(frozen=True, slots=True)
class Surface:
    """Expiries in the order sent, and counts over all of them."""

    expiries: tuple[SurfaceExpiry, ...]
    totals: SurfaceTotals


def build_surface(expiries: Sequence[ChainExpiry]) -> Surface:
    """Forwards, discount factors, out-of-the-money volatilities and flags of an option chain.

    Expiries in any order, the same one twice is taken as two. What the quotes are like never raises: an expiry without
    a forward has a status and NaN volatilities. Raises InputError where there is no expiry at all. Accuracy of
    volatilities given the forward: see ``engine.black``; of forwards: their standard errors. Definitions of the flags:
    ``engine.market.cleaning``.
    """
    if not expiries:
        raise InputError("expiries", "is empty", allowed="at least one expiry")
    fits = [infer_forward(chain) for chain in expiries]
    flags = flag_chain(expiries, fits)
    quotes = _out_of_the_money(expiries, fits)
    ends = np.cumsum([chain.size for chain in expiries])[:-1]
    columns = [
        [QuotedVols(v, s) for v, s in zip(np.split(column.vols, ends), np.split(column.statuses, ends), strict=True)]
        for column in (quotes.bid, quotes.mid, quotes.ask)
    ]
    payoffs = np.split(quotes.payoffs, ends)
    out = tuple(
        _expiry(chain, fit, own, side, bid, mid, ask)
        for chain, fit, own, side, bid, mid, ask in zip(expiries, fits, flags, payoffs, *columns, strict=True)
    )
    return Surface(out, _totals(expiries, out))


@dataclass(frozen=True, slots=True)
class _Quotes:
    """Columns over all expiries end to end."""

    payoffs: Bytes
    bid: QuotedVols
    mid: QuotedVols
    ask: QuotedVols


def _out_of_the_money(expiries: Sequence[ChainExpiry], fits: Sequence[ForwardFit]) -> _Quotes:
    """Side and volatilities at every strike, one inversion for all."""
    sizes = [chain.size for chain in expiries]
    strikes = np.concatenate([chain.strikes for chain in expiries])
    forward = np.repeat([fit.forward if fit.known else np.nan for fit in fits], sizes)
    unit = forward * np.repeat([fit.discount_factor if fit.known else np.nan for fit in fits], sizes)
    years = np.repeat([chain.expiry for chain in expiries], sizes)
    call = strikes >= forward
    bids = np.where(call, _column(expiries, "call_bids"), _column(expiries, "put_bids"))
    asks = np.where(call, _column(expiries, "call_asks"), _column(expiries, "put_asks"))
    prices = np.concatenate([bids, 0.5 * (bids + asks), asks])
    found = total_deviation(np.tile(log_moneyness(strikes, forward), 3), prices / np.tile(unit, 3))
    statuses = np.where(np.isnan(prices), np.uint8(Status.NO_QUOTE), found.statuses).reshape(3, -1)
    statuses[:, np.isnan(unit)] = Status.NOT_FINITE
    expired = ~(years > 0.0)
    statuses[:, expired] = Status.EXPIRED
    vols = found.deviations.reshape(3, -1) / np.sqrt(np.where(expired, np.nan, years))
    vols[statuses != Status.OK] = np.nan
    payoffs = np.where(np.isnan(unit), Payoff.OTM, np.where(call, Payoff.CALL, Payoff.PUT)).astype(np.uint8)
    bid, mid, ask = (QuotedVols(v, s) for v, s in zip(vols, statuses, strict=True))
    return _Quotes(payoffs, bid, mid, ask)


def _column(expiries: Sequence[ChainExpiry], name: str) -> Floats:
    return np.concatenate([getattr(chain, name) for chain in expiries])


def _expiry(
    chain: ChainExpiry,
    fit: ForwardFit,
    flags: ExpiryFlags,
    payoffs: Bytes,
    bid: QuotedVols,
    mid: QuotedVols,
    ask: QuotedVols,
) -> SurfaceExpiry:
    own = np.where(payoffs == Payoff.CALL, flags.calls, flags.puts)
    usable = (mid.statuses == Status.OK) & ((own & ~np.uint16(QuoteFlag.WIDE)) == 0)
    return SurfaceExpiry(
        expiry=chain.expiry,
        strikes=chain.strikes,
        forward=fit.forward,
        discount_factor=fit.discount_factor,
        forward_error=fit.forward_error,
        discount_factor_error=fit.discount_factor_error,
        pairs=fit.pairs,
        pairs_used=fit.pairs_used,
        rms_residual=fit.rms_residual,
        status=fit.status,
        warnings=fit.warnings,
        payoffs=payoffs,
        bid=bid,
        mid=mid,
        ask=ask,
        call_flags=flags.calls,
        put_flags=flags.puts,
        usable=usable,
    )


def _totals(expiries: Sequence[ChainExpiry], out: Sequence[SurfaceExpiry]) -> SurfaceTotals:
    bids = np.concatenate([_column(expiries, "call_bids"), _column(expiries, "put_bids")])
    asks = np.concatenate([_column(expiries, "call_asks"), _column(expiries, "put_asks")])
    codes = np.concatenate([e.call_flags for e in out] + [e.put_flags for e in out])
    fitted = (ForwardStatus.FITTED, ForwardStatus.GIVEN)
    return SurfaceTotals(
        expiries=len(out),
        expiries_without_forward=sum(e.status not in fitted for e in out),
        strikes=sum(chain.size for chain in expiries),
        quotes=int(np.count_nonzero(~(np.isnan(bids) & np.isnan(asks)))),
        two_sided=int(np.count_nonzero((bids > 0.0) & ~np.isnan(asks))),
        flagged=int(np.count_nonzero(codes)),
        by_flag={flag.word: int(np.count_nonzero(codes & np.uint16(flag))) for flag in QuoteFlag},
        usable=sum(int(np.count_nonzero(e.usable)) for e in out),
        pairs=sum(e.pairs for e in out),
        pairs_used=sum(e.pairs_used for e in out),
        impossible_quotes=sum(chain.impossible for chain in expiries),
    )
