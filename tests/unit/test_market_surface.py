"""From chains to surfaces: volatilities of the out-of-the-money side, statuses, flags and totals put together."""

from __future__ import annotations

import math

import numpy as np
import pytest

from engine.errors import InputError
from engine.market.chain import ChainExpiry, QuoteFlag
from engine.market.forwards import ForwardStatus
from engine.status import Payoff, Status
from engine.surface import build_surface
from tests.unit.market_chain import black_call, black_put, quoted, with_quotes

NONE = math.nan
STRIKES = np.linspace(70.0, 140.0, 29)


def _between_vols(low, high, *, given=True, years=0.75):
    """Bids at one volatility and asks at a higher one, by scipy's normal law: the engine's inverse has to find them."""
    market = {"forward": 103.0, "discount_factor": 0.96, "years": years}
    columns = [price(STRIKES, vol=vol, **market) for price in (black_call, black_put) for vol in (low, high)]
    return ChainExpiry(years, STRIKES, *columns, *((103.0, 0.96) if given else ()))


def test_volatilities_of_bid_mid_and_ask():
    (one,) = build_surface([_between_vols(0.24, 0.26)]).expiries
    assert one.status is ForwardStatus.GIVEN
    assert np.array_equal(one.payoffs, np.where(STRIKES >= 103.0, Payoff.CALL, Payoff.PUT))
    for column in (one.bid, one.mid, one.ask):
        assert np.all(column.statuses == Status.OK)
    # The textbook formula subtracts: the smallest values here, a thousandth of the forward, have lost three digits.
    assert one.bid.vols == pytest.approx(0.24, rel=1e-11)
    assert one.ask.vols == pytest.approx(0.26, rel=1e-11)
    assert np.all((one.bid.vols < one.mid.vols) & (one.mid.vols < one.ask.vols))
    assert one.usable.all()


def test_the_mid_is_the_volatility_of_the_middle_price():
    (one,) = build_surface([_between_vols(0.2, 0.3)]).expiries
    market = {"forward": 103.0, "discount_factor": 0.96, "years": 0.75}
    for price, side in ((black_call, Payoff.CALL), (black_put, Payoff.PUT)):
        at = one.payoffs == side
        middle = 0.5 * (price(STRIKES[at], vol=0.2, **market) + price(STRIKES[at], vol=0.3, **market))
        assert price(STRIKES[at], vol=one.mid.vols[at], **market) == pytest.approx(middle, rel=1e-10)


def test_a_fitted_forward_gives_the_same_volatilities():
    (one,) = build_surface([_between_vols(0.2499, 0.2501, given=False)]).expiries
    assert one.status is ForwardStatus.FITTED
    assert one.pairs == one.pairs_used == STRIKES.size
    assert one.mid.vols == pytest.approx(0.25, abs=1e-5)


def test_calls_and_puts_agree_about_the_volatility_at_the_forward():
    """What the fitted forward is for: across the switch from puts to calls the smile has no step."""
    strikes = np.linspace(95.0, 105.0, 41)
    (one,) = build_surface([quoted(strikes, forward=100.06, discount_factor=0.95, half_spread=0.001)]).expiries
    assert np.ptp(one.mid.vols) < 1e-4
    assert set(one.payoffs.tolist()) == {Payoff.CALL, Payoff.PUT}


def test_statuses_say_why_a_volatility_is_missing():
    chain = _between_vols(0.24, 0.26)
    chain = with_quotes(chain, [20], call_bids=NONE)
    chain = with_quotes(chain, [21], call_bids=NONE, call_asks=NONE)
    chain = with_quotes(chain, [22], call_bids=0.0)
    chain = with_quotes(chain, [23], call_asks=500.0)
    chain = with_quotes(chain, [2], call_bids=NONE, call_asks=NONE)  # in the money: not looked at
    (one,) = build_surface([chain]).expiries
    words = [[Status(column.statuses[i]).word for column in (one.bid, one.mid, one.ask)] for i in (20, 21, 22, 23, 2)]
    assert words == [
        ["no_quote", "no_quote", "ok"],
        ["no_quote"] * 3,
        ["zero_time_value", "ok", "ok"],
        ["ok", "above_maximum", "above_maximum"],
        ["ok"] * 3,
    ]
    for column in (one.bid, one.mid, one.ask):
        assert np.array_equal(np.isnan(column.vols), column.statuses != Status.OK)
    assert list(np.flatnonzero(~one.usable)) == [20, 21, 22, 23]
    assert one.call_flags[20] == one.call_flags[22] == QuoteFlag.NO_BID
    assert one.call_flags[21] == 0


def test_expiries_without_a_forward_and_expired_ones():
    alone = quoted([95.0, 105.0], half_spread=0.01)
    alone = with_quotes(alone, [0], put_bids=NONE)
    past = _between_vols(0.2, 0.3)
    past = ChainExpiry(0.0, STRIKES, past.call_bids, past.call_asks, past.put_bids, past.put_asks, 103.0, 0.96)
    good = _between_vols(0.24, 0.26)
    surface = build_surface([alone, good, past])
    none, fine, dead = surface.expiries
    assert none.status is ForwardStatus.TOO_FEW_PAIRS and none.warnings
    assert math.isnan(none.forward) and not none.usable.any()
    assert np.all(none.mid.statuses == Status.NOT_FINITE) and np.all(none.payoffs == Payoff.OTM)
    assert dead.status is ForwardStatus.EXPIRED and np.all(dead.mid.statuses == Status.EXPIRED)
    assert fine.usable.all()
    assert surface.totals.expiries == 3 and surface.totals.expiries_without_forward == 2


def test_totals_count_what_is_there():
    chain = quoted(STRIKES, vol=0.25, years=0.74, half_spread=0.02)
    chain = with_quotes(chain, [3], call_bids=chain.call_asks[3], call_asks=chain.call_bids[3])
    chain = with_quotes(chain, [20], call_bids=NONE, call_asks=NONE, put_asks=NONE)
    chain = with_quotes(chain, [5], put_bids=-1.0)
    totals = build_surface([chain, _between_vols(0.24, 0.26)]).totals
    n = STRIKES.size
    assert (totals.expiries, totals.strikes, totals.quotes) == (2, 2 * n, 4 * n - 1)
    assert totals.two_sided == 4 * n - 3
    assert totals.by_flag["crossed"] == 1 and totals.by_flag["no_ask"] == 1 and totals.by_flag["no_bid"] == 1
    assert totals.flagged == 3 == sum(totals.by_flag.values())
    assert totals.pairs == totals.pairs_used == 2 * n - 3
    assert totals.usable == 2 * n - 2  # the call not quoted, the put without a bid
    assert totals.impossible_quotes == 1
    assert list(totals.by_flag) == [flag.word for flag in QuoteFlag]


def test_flagged_quotes_are_not_usable_unless_only_wide():
    chain = quoted(np.linspace(90.0, 110.0, 21), vol=0.4, half_spread=0.05)
    wide = with_quotes(chain, [15], call_bids=chain.call_bids[15] - 0.3, call_asks=chain.call_asks[15] + 0.3)
    stale = with_quotes(wide, [5], put_bids=wide.put_bids[5] + 2.0, put_asks=wide.put_asks[5] + 2.0)
    (one,) = build_surface([stale]).expiries
    assert one.call_flags[15] == QuoteFlag.WIDE and one.usable[15]
    assert one.put_flags[5] & QuoteFlag.PARITY_OUTLIER
    assert list(np.flatnonzero(~one.usable)) == [5]


def test_batch_equals_one_by_one():
    """But for calendar flags, an expiry does not depend on its neighbours."""
    expiries = [quoted(STRIKES, years=t, vol=0.3, half_spread=0.03) for t in (0.2, 0.5, 1.0)]
    together = build_surface(expiries).expiries
    for chain, one in zip(expiries, together, strict=True):
        (alone,) = build_surface([chain]).expiries
        assert (alone.forward, alone.discount_factor, alone.forward_error) == (
            one.forward,
            one.discount_factor,
            one.forward_error,
        )
        assert np.array_equal(alone.mid.vols, one.mid.vols, equal_nan=True)
        assert np.array_equal(alone.call_flags, one.call_flags) and np.array_equal(alone.put_flags, one.put_flags)


def test_no_expiry_at_all_is_refused_and_no_strike_is_not():
    with pytest.raises(InputError) as caught:
        build_surface([])
    assert caught.value.argument == "expiries"
    (one,) = build_surface([ChainExpiry(1.0, [], [], [], [], [])]).expiries
    assert one.status is ForwardStatus.TOO_FEW_PAIRS and one.mid.vols.shape == (0,)
