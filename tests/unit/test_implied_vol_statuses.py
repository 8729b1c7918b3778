"""Implied volatilities: a status a quote, no exception for a bad one, and what the solver spends."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest

from engine.black import MAX_EVALUATIONS, black_greeks, implied_vols, inversion, otm_value, total_deviation
from engine.errors import InputError
from engine.moneyness import log_moneyness
from engine.status import Payoff, Status

EPS = float(np.finfo(np.float64).eps)
TINY = float(np.finfo(np.float64).tiny)
MARKET = {"forward": 100.0, "discount_factor": 0.95, "expiry": 0.5}


def _prices(strikes, vol, payoff, *, forward=100.0, discount_factor=0.95, expiry=0.5):
    strikes = np.asarray(strikes, dtype=float)
    value = forward * otm_value(log_moneyness(strikes, forward), vol * math.sqrt(expiry))
    is_call = strikes >= forward if payoff == Payoff.OTM else np.full(strikes.shape, payoff == Payoff.CALL)
    intrinsic = np.maximum(np.where(is_call, forward - strikes, strikes - forward), 0.0)
    return discount_factor * (value + intrinsic)


def test_statuses_of_total_deviations():
    """One of each, at the limits themselves and one double beside them."""
    top = math.exp(-0.5)
    cases = [
        (0.1, 0.05, Status.OK),
        (0.1, 0.0, Status.ZERO_TIME_VALUE),
        (0.1, -0.0, Status.ZERO_TIME_VALUE),
        (0.1, 5e-324, Status.ZERO_TIME_VALUE),
        (0.1, TINY, Status.OK),
        (0.1, -5e-324, Status.BELOW_INTRINSIC),
        (0.1, -1.0, Status.BELOW_INTRINSIC),
        (0.1, 1.0, Status.ABOVE_MAXIMUM),
        (0.1, math.nextafter(1.0, 0.0), Status.OK),
        (0.0, 1.0, Status.ABOVE_MAXIMUM),
        (-0.5, top, Status.ABOVE_MAXIMUM),
        (-0.5, math.nextafter(top, 0.0), Status.OK),
        (-0.5, 0.9, Status.ABOVE_MAXIMUM),
        (-800.0, 0.0, Status.ZERO_TIME_VALUE),
        (-800.0, 5e-324, Status.ABOVE_MAXIMUM),
        (0.1, math.nan, Status.NOT_FINITE),
        (0.1, math.inf, Status.NOT_FINITE),
        (0.1, -math.inf, Status.NOT_FINITE),
        (math.nan, 0.1, Status.NOT_FINITE),
        (math.inf, 0.1, Status.NOT_FINITE),
        (-math.inf, 0.1, Status.NOT_FINITE),
        (1e7, 0.1, Status.NOT_FINITE),
    ]
    found = total_deviation([k for k, _, _ in cases], [v for _, v, _ in cases])
    assert [Status(s) for s in found.statuses] == [s for _, _, s in cases]
    assert np.array_equal(np.isnan(found.deviations), found.statuses != Status.OK)
    assert np.all(found.deviations[found.statuses == Status.OK] > 0.0)


def test_shapes_broadcast_and_may_be_empty():
    found = total_deviation(np.array([[0.0], [0.1]]), np.array([0.01, 0.02, -1.0]))
    assert found.deviations.shape == found.statuses.shape == (2, 3)
    assert total_deviation(0.0, 0.01).deviations.shape == ()
    assert total_deviation([], []).deviations.shape == (0,)
    assert implied_vols([], strikes=[], payoffs=[], **MARKET).vols.shape == (0,)


@pytest.mark.parametrize("payoff", [Payoff.CALL, Payoff.PUT, Payoff.OTM])
def test_volatility_comes_back(payoff):
    """On both sides of the forward, to the rounding of the price over its vega."""
    strikes = np.array([60.0, 80.0, 99.0, 100.0, 101.0, 130.0, 180.0])
    price = _prices(strikes, 0.3, payoff)
    found = implied_vols(price, strikes=strikes, payoffs=payoff, **MARKET)
    s = 0.3 * math.sqrt(0.5)
    vega = 95.0 * black_greeks(np.log(strikes / 100.0), s, 0.5, is_call=True).vega
    assert np.all(found.statuses == Status.OK)
    assert np.all(np.abs(found.vols - 0.3) <= 4.0 * EPS * (price + 95.0) / vega + 4.0 * EPS)


def test_payoffs_one_per_strike():
    strikes = np.array([80.0, 120.0, 80.0, 120.0])
    payoffs = np.array([Payoff.CALL, Payoff.PUT, Payoff.OTM, Payoff.CALL], dtype=np.uint8)
    price = np.array([float(_prices([k], 0.25, Payoff(p))[0]) for k, p in zip(strikes, payoffs, strict=True)])
    found = implied_vols(price, strikes=strikes, payoffs=payoffs, **MARKET)
    assert found.vols == pytest.approx(np.full(4, 0.25), rel=1e-13)


def test_statuses_of_prices():
    """Bad quotes among good ones: each its status, the good ones untouched."""
    strikes = np.full(9, 90.0)
    price = np.array([12.0, 9.4, 95.0, 96.0, math.nan, math.inf, -1.0, 9.5, 12.0])
    expected = ["ok", "below_intrinsic", "above_maximum", "above_maximum", "not_finite", "not_finite"]
    expected += ["below_intrinsic", "zero_time_value", "ok"]
    found = implied_vols(price, strikes=strikes, payoffs=Payoff.CALL, **MARKET)
    assert [Status(s).word for s in found.statuses] == expected
    assert np.array_equal(np.isnan(found.vols), found.statuses != Status.OK)
    alone = implied_vols([12.0], strikes=[90.0], payoffs=Payoff.CALL, **MARKET)
    assert found.vols[0] == found.vols[8] == pytest.approx(alone.vols[0], rel=4 * EPS)


def test_upper_bounds_are_forward_and_strike():
    """A put is worth less than its discounted strike, a call less than its discounted forward, on both sides."""
    strikes = np.array([80.0, 80.0, 125.0, 125.0])
    payoffs = np.array([Payoff.CALL, Payoff.PUT, Payoff.CALL, Payoff.PUT], dtype=np.uint8)
    bound = 0.5 * np.where(payoffs == Payoff.CALL, 100.0, strikes)
    market = {"forward": 100.0, "discount_factor": 0.5, "expiry": 1.0, "strikes": strikes, "payoffs": payoffs}
    assert np.all(implied_vols(bound, **market).statuses == Status.ABOVE_MAXIMUM)
    assert np.all(implied_vols(bound * (1.0 - 8.0 * EPS), **market).statuses == Status.OK)


@pytest.mark.parametrize("expiry", [0.0, -1.0, -0.0])
def test_expired(expiry):
    found = implied_vols([1.0, math.nan], strikes=100.0, forward=100.0, discount_factor=1.0, expiry=expiry, payoffs=2)
    assert [Status(s) for s in found.statuses] == [Status.EXPIRED, Status.NOT_FINITE]
    assert np.all(np.isnan(found.vols))


@pytest.mark.parametrize("name", ["strikes", "forward", "discount_factor", "expiry"])
def test_not_finite_arguments_are_faults_of_their_quote(name):
    columns = {"strikes": 100.0, "forward": 100.0, "discount_factor": 1.0, "expiry": 1.0}
    columns[name] = np.array([columns[name], math.nan, math.inf])
    found = implied_vols([10.0, 10.0, 10.0], payoffs=Payoff.CALL, **columns)
    assert [Status(s) for s in found.statuses] == [Status.OK, Status.NOT_FINITE, Status.NOT_FINITE]


def test_intrinsic_value_has_no_volatility_in_whatever_order_it_was_computed():
    """D (F - K), D F - D K and so on: all are within rounding of no time value, and none gets a made-up number."""
    rng = np.random.default_rng(20261202)
    forward, discount = rng.uniform(1.0, 1e4, 2000), rng.uniform(0.3, 1.1, 2000)
    strike = forward * rng.uniform(0.05, 0.99, 2000)
    for price in (discount * (forward - strike), discount * forward - discount * strike, (forward - strike) * discount):
        found = implied_vols(
            price, strikes=strike, forward=forward, discount_factor=discount, expiry=1.0, payoffs=Payoff.CALL
        )
        assert np.all(found.statuses == Status.ZERO_TIME_VALUE)
    below = implied_vols(
        discount * (forward - strike) - 1e-14 * discount * forward,
        strikes=strike,
        forward=forward,
        discount_factor=discount,
        expiry=1.0,
        payoffs=Payoff.CALL,
    )
    assert np.all(below.statuses == Status.BELOW_INTRINSIC)


def test_in_the_money_time_value_is_exact():
    """The time value of the doubles sent, by rational arithmetic, has the volatility returned; both sides."""
    rng = np.random.default_rng(7)
    for _ in range(200):
        forward, discount = float(rng.uniform(50, 150)), float(rng.uniform(0.5, 1.0))
        strike = forward * float(rng.uniform(0.6, 1.6))
        payoff = Payoff.PUT if strike > forward else Payoff.CALL
        price = float(_prices([strike], 0.2, payoff, forward=forward, discount_factor=discount, expiry=1.0)[0])
        intrinsic = Fraction(discount) * abs(Fraction(forward) - Fraction(strike))
        exact = (Fraction(price) - intrinsic) / Fraction(discount) / Fraction(forward)
        found = implied_vols(
            [price], strikes=[strike], forward=forward, discount_factor=discount, expiry=1.0, payoffs=payoff
        )
        back = float(otm_value(log_moneyness(np.array([strike]), forward), found.vols)[0])
        steep = 1.0 + (math.log(strike / forward) / 0.2) ** 2
        assert back == pytest.approx(float(exact), rel=8 * EPS * steep)


def test_wrong_calls_are_refused_by_name():
    good = {"strikes": [100.0, 110.0], "payoffs": 0, **MARKET}
    prices = [5.0, 2.0]
    for change, argument, index in (
        ({"strikes": [100.0]}, "strikes", ()),
        ({"strikes": [100.0, -1.0]}, "strikes", (1,)),
        ({"forward": 0.0}, "forward", (0,)),
        ({"discount_factor": [1.0, -0.5]}, "discount_factor", (1,)),
        ({"payoffs": [0, 3]}, "payoffs", (1,)),
        ({"payoffs": [0, 0, 0]}, "payoffs", ()),
        ({"payoffs": "call"}, "payoffs", ()),
        ({"payoffs": -1}, "payoffs", (0,)),
        ({"payoffs": [1.0, 0.5]}, "payoffs", (1,)),
        ({"payoffs": [math.nan, 0.0]}, "payoffs", (0,)),
        ({"strikes": ["a", "b"]}, "strikes", ()),
        ({"expiry": [1.0, 1.0, 1.0]}, "expiry", ()),
    ):
        with pytest.raises(InputError) as caught:
            implied_vols(prices, **{**good, **change})
        assert (caught.value.argument, caught.value.index) == (argument, index)
    with pytest.raises(InputError) as caught:
        implied_vols([[1.0]], **good)
    assert caught.value.argument == "prices"


def _spread(n):
    """Quotes of all regions: total deviations 1e-6 to 12, both sides, to the ends of the double range, shuffled."""
    rng = np.random.default_rng(11)
    s = 10.0 ** rng.uniform(-6.0, 1.1, n)
    k = s * rng.uniform(0.0, 6.0, n) ** 2 * rng.choice([-1.0, 1.0], n)
    k[:50] = 0.0
    value = otm_value(k, s)
    keep = (value > 1e-300) & (value < np.exp(np.minimum(k, 0.0)))
    return k[keep], value[keep], s[keep]


def test_at_most_four_evaluations_a_quote(monkeypatch):
    """Counted where Mills' ratio is taken: each quote alone, so that a call is an evaluation of one quote."""
    calls = []

    def counted(plain):
        return lambda *columns: (calls.append(1), plain(*columns))[1]

    for name in ("difference", "difference_near", "total"):
        monkeypatch.setattr(inversion, name, counted(getattr(inversion, name)))
    k, value, s = _spread(2000)
    counts = []
    for one_k, one_value in zip(k, value, strict=True):
        calls.clear()
        total_deviation(one_k, one_value)
        counts.append(len(calls))
    assert min(counts) >= 1  # the counter does count
    assert max(counts) <= MAX_EVALUATIONS <= 4
    assert np.mean(np.array(counts)[s < 0.3]) < 1.05  # what the guesses are for


def test_batch_equals_one_by_one():
    """More quotes than one block, all regions mixed: the same as each alone, to the order of summation in a product of
    matrices (4 rounding units)."""
    k, value, _ = _spread(9000)
    together = total_deviation(k, value).deviations
    assert together.shape[0] > 8192
    for i in range(0, together.shape[0], 37):
        alone = total_deviation(k[i : i + 1], value[i : i + 1]).deviations[0]
        assert together[i] == pytest.approx(alone, rel=4 * EPS)


def test_bad_quotes_do_not_move_good_ones():
    k, value, _ = _spread(3000)
    plain = total_deviation(k, value).deviations
    spoiled = value.copy()
    spoiled[::7] = np.nan
    spoiled[3::11] = -1.0
    found = total_deviation(k, spoiled)
    good = found.statuses == Status.OK
    assert good.sum() > 2000
    assert found.deviations[good] == pytest.approx(plain[good], rel=4 * EPS)


def test_arguments_are_not_changed():
    k, value, _ = _spread(100)
    kept = k.copy(), value.copy()
    total_deviation(k, value)
    strikes = 100.0 * np.exp(k[np.abs(k) < 1.0])
    price = np.full(strikes.shape, 1.0)
    implied_vols(price, strikes=strikes, payoffs=Payoff.CALL, **MARKET)
    assert np.array_equal(k, kept[0]) and np.array_equal(value, kept[1]) and np.all(price == 1.0)
