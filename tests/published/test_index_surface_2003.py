"""The Euro Stoxx 50 surface of 7 October 2003: 144 published volatilities to prices and back, and as a chain.

Source: W. Schoutens, E. Simons, J. Tistaert, "A perfect calibration! Now what?", Wilmott magazine, March 2004,
appendix: spot 2461.44, rate 3 %, no dividend yield (digits from memory, see the header of the data file).

Conditioning. A call deep in the money is mostly intrinsic value, so that the rounding of its price moves its
volatility by far more than the price. The round trip therefore goes through the out-of-the-money side (payoff
``otm``), which keeps every digit; the calls as published are checked too, within what rounding leaves of them.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import mpmath
import numpy as np
import pytest

from engine.black import implied_vols
from engine.market.chain import ChainExpiry
from engine.market.forwards import ForwardStatus
from engine.status import Payoff, Status
from engine.surface import build_surface

SPOT, RATE = 2461.44, 0.03
TABLE = np.loadtxt(
    Path(__file__).with_name("data") / "index_surface_2003.csv", delimiter=",", comments=("#", "expiry_years")
)
YEARS, STRIKES, VOLS = TABLE.T
FORWARD, DISCOUNT = SPOT * np.exp(RATE * YEARS), np.exp(-RATE * YEARS)


def _black(call, strike, years, vol, forward, discount_factor):
    """Black (1976) in 40 digits: the price of a call or put to the last digit of a double."""
    with mpmath.workdps(40):
        k, f, s = mpmath.mpf(strike), mpmath.mpf(forward), mpmath.mpf(vol) * mpmath.sqrt(mpmath.mpf(years))
        d1 = mpmath.log(f / k) / s + s / 2
        sign = 1 if call else -1
        value = sign * (f * mpmath.ncdf(sign * d1) - k * mpmath.ncdf(sign * (d1 - s)))
        return float(mpmath.mpf(discount_factor) * value)


@cache
def _prices(call):
    """All 144 as calls, as puts, or (None) out of the money."""
    calls = STRIKES >= FORWARD if call is None else np.full(144, call)
    return np.array([_black(*row) for row in zip(calls, STRIKES, YEARS, VOLS, FORWARD, DISCOUNT, strict=True)])


def test_the_table_is_the_one_of_the_paper():
    """144 options, as the paper says."""
    assert TABLE.shape == (144, 3)
    assert np.all((0.0 < YEARS) & (YEARS < 6.0)) and np.all((0.1 < VOLS) & (VOLS < 0.5))


def test_volatilities_to_prices_and_back():
    """All 144 to 1e-12, out of the money."""
    found = implied_vols(
        _prices(None),
        strikes=STRIKES,
        forward=FORWARD,
        discount_factor=DISCOUNT,
        expiry=YEARS,
        payoffs=np.full(144, Payoff.OTM, dtype=np.uint8),
    )
    assert np.all(found.statuses == Status.OK)
    assert np.max(np.abs(found.vols / VOLS - 1.0)) <= 1e-12


def test_the_calls_as_published_come_back_within_their_conditioning():
    """A price rounded to 2^-53 of itself fixes the volatility to price / (vol x vega) times that and no better."""
    prices = _prices(True)
    found = implied_vols(
        prices, strikes=STRIKES, forward=FORWARD, discount_factor=DISCOUNT, expiry=YEARS, payoffs=np.zeros(144)
    )
    s = VOLS * np.sqrt(YEARS)
    d1 = np.log(FORWARD / STRIKES) / s + 0.5 * s
    vega = DISCOUNT * FORWARD * np.exp(-0.5 * d1 * d1) / np.sqrt(2.0 * np.pi) * np.sqrt(YEARS)
    condition = np.maximum(1.0, (prices + DISCOUNT * (FORWARD + STRIKES)) / (VOLS * vega))
    assert np.all(found.statuses == Status.OK)
    assert np.all(np.abs(found.vols / VOLS - 1.0) <= 16.0 * 2.0**-53 * condition)


def _chain(half_spread, lean):
    """Calls and puts of every expiry quoted around the surface's values, midpoints off by ``lean`` (2, 144)."""
    middle = np.stack([_prices(True), _prices(False)]) + lean
    bids, asks = np.maximum(middle - half_spread, 0.0), middle + half_spread
    return [
        ChainExpiry(float(t), STRIKES[at], bids[0, at], asks[0, at], bids[1, at], asks[1, at])
        for t, at in ((t, t == YEARS) for t in np.unique(YEARS))
    ]


def _scores(surface):
    """Errors of forwards and discount factors in standard errors."""
    for one in surface.expiries:
        assert one.status is ForwardStatus.FITTED
        assert one.pairs >= 5
        yield (one.forward - SPOT * np.exp(RATE * one.expiry)) / one.forward_error
        yield (one.discount_factor - np.exp(-RATE * one.expiry)) / one.discount_factor_error


HALF_SPREAD = 0.5 + 0.002 * np.stack([_prices(True), _prices(False)])


def test_a_chain_around_the_surface_gives_its_forwards_back():
    """Bids and asks a point and more apart around every value: each forward and discount factor within two standard
    errors, which are small enough to mean something."""
    surface = build_surface(_chain(HALF_SPREAD, 0.0))
    assert surface.totals.strikes == 144
    assert np.max(np.abs(list(_scores(surface)))) <= 2.0
    assert all(one.pairs_used == one.pairs and one.forward_error < 2.0 for one in surface.expiries)


def test_wherever_the_values_are_between_bid_and_ask_the_errors_cover():
    """Values uniform between bid and ask, 40 draws: within two standard errors as often as a normal law is."""
    random = np.random.default_rng(2003)
    leans = random.uniform(-1.0, 1.0, (40, 2, 144)) * HALF_SPREAD
    scores = [score for lean in leans for score in _scores(build_surface(_chain(HALF_SPREAD, lean)))]
    assert 0.93 <= np.mean(np.abs(scores) <= 2.0) <= 0.98


def test_the_surface_comes_back_from_its_chain():
    """Spreads of a hundredth of a point: mid volatilities of all 144 strikes to five digits."""
    surface = build_surface(_chain(0.005, 0.0))
    vols = np.concatenate([one.mid.vols for one in surface.expiries])
    order = np.concatenate([np.flatnonzero(t == YEARS) for t in np.unique(YEARS)])
    assert vols == pytest.approx(VOLS[order], abs=2e-5)
