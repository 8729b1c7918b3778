"""Chains for the market tests, priced by Black's formula written apart from the engine (scipy's normal law)."""

from __future__ import annotations

import numpy as np
from scipy.special import ndtr

from engine.market.chain import ChainExpiry

__all__ = ["black_call", "black_put", "quoted", "with_quotes"]


def black_call(strikes, *, forward, discount_factor, years, vol):
    """Black (1976), J. Financial Economics 3:167-179, the textbook formula."""
    s = vol * np.sqrt(years)
    d1 = np.log(forward / strikes) / s + 0.5 * s
    return discount_factor * (forward * ndtr(d1) - strikes * ndtr(d1 - s))


def black_put(strikes, *, forward, discount_factor, years, vol):
    s = vol * np.sqrt(years)
    d1 = np.log(forward / strikes) / s + 0.5 * s
    return discount_factor * (strikes * ndtr(s - d1) - forward * ndtr(-d1))


def quoted(
    strikes,
    *,
    forward=100.0,
    discount_factor=0.97,
    years=0.5,
    vol=0.2,
    half_spread=0.02,
    lean=None,
    given_forward=None,
    given_discount_factor=None,
):
    """One expiry with every option quoted at Black's value plus ``lean`` (2, n), half a spread to either side."""
    strikes = np.asarray(strikes, dtype=float)
    market = {"forward": forward, "discount_factor": discount_factor, "years": years, "vol": vol}
    lean = np.zeros((2, strikes.size)) if lean is None else lean
    calls, puts = black_call(strikes, **market) + lean[0], black_put(strikes, **market) + lean[1]
    return ChainExpiry(
        years,
        strikes,
        np.maximum(calls - half_spread, 0.0),
        calls + half_spread,
        np.maximum(puts - half_spread, 0.0),
        puts + half_spread,
        given_forward,
        given_discount_factor,
    )


def with_quotes(chain, rows=(), **columns):
    """The chain with the columns named replaced, at ``rows`` or as a whole."""
    quotes = {name: getattr(chain, name).copy() for name in ("call_bids", "call_asks", "put_bids", "put_asks")}
    for name, values in columns.items():
        quotes[name][rows if len(rows) else slice(None)] = values
    return ChainExpiry(
        chain.expiry, chain.strikes, **quotes, forward=chain.forward, discount_factor=chain.discount_factor
    )
