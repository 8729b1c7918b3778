"""Flags of quotes: each raised by a minimal chain made by hand, none on an arbitrage-free one, and the searches for
arbitrage against an exhaustive one by plain loops."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from engine import MODELS, Payoff, Slice, price_smiles
from engine.market.arbitrage import butterfly, calendar, vertical
from engine.market.chain import ChainExpiry, QuoteFlag, flag_words
from engine.market.cleaning import flag_chain
from engine.market.forwards import infer_forward
from engine.market.ladder import Ladder
from tests.unit.market_chain import black_call, black_put, quoted, with_quotes

NONE = math.nan
QUOTES = ("call_bids", "call_asks", "put_bids", "put_asks")


def _words(*expiries):
    """Per expiry, flagged quotes as {("call" or "put", strike): words}."""
    fits = [infer_forward(chain) for chain in expiries]
    return [
        {
            (kind, float(strike)): flag_words(int(code))
            for kind, codes in (("call", flags.calls), ("put", flags.puts))
            for strike, code in zip(chain.strikes, codes, strict=True)
            if code
        }
        for chain, flags in zip(expiries, flag_chain(expiries, fits), strict=True)
    ]


def _given(strikes, calls=None, puts=None, *, years=0.5, forward=100.0, discount_factor=1.0):
    """A hand-made expiry with a given market: per strike a pair (bid, ask), NONE where there is none."""
    empty = [(NONE, NONE)] * len(strikes)
    columns = [*zip(*(calls or empty), strict=True), *zip(*(puts or empty), strict=True)]
    return ChainExpiry(years, strikes, *(list(c) for c in columns), forward, discount_factor)


def test_crossed():
    assert _words(_given([110.0], calls=[(2.0, 1.9)])) == [{("call", 110.0): ("crossed",)}]
    assert _words(_given([90.0], puts=[(2.0, 1.9)])) == [{("put", 90.0): ("crossed",)}]
    assert _words(_given([110.0], calls=[(2.0, 2.0)])) == [{}]  # locked is not crossed


def test_no_bid_and_no_ask():
    """A bid of zero and no bid at all are the same; where nothing is quoted nothing is wrong with the quote."""
    calls = [(NONE, 1.5), (0.0, 1.4), (1.0, NONE), (NONE, NONE)]
    assert _words(_given([105.0, 106.0, 107.0, 108.0], calls=calls)) == [
        {("call", 105.0): ("no_bid",), ("call", 106.0): ("no_bid",), ("call", 107.0): ("no_ask",)}
    ]


def test_below_intrinsic():
    """F = 100, D = 0.9: the call struck at 80 is worth at least 18, the put at 120 the same."""
    assert _words(_given([80.0], calls=[(17.0, 17.9)], discount_factor=0.9)) == [{("call", 80.0): ("below_intrinsic",)}]
    assert _words(_given([120.0], puts=[(17.0, 17.9)], discount_factor=0.9)) == [{("put", 120.0): ("below_intrinsic",)}]
    assert _words(_given([80.0], calls=[(17.0, 18.1)], discount_factor=0.9)) == [{}]  # the ask is what can be bought at


def test_below_intrinsic_grants_the_forward_its_error():
    """The forward is known to two standard errors only: an ask just under the line is not wrong, one far under is."""
    chain = quoted(np.linspace(80.0, 120.0, 9), vol=0.4, half_spread=0.5)
    margin = 2.0 * infer_forward(chain).line_errors[0]
    floor = 0.97 * 20.0
    for ask, flagged in ((floor - 0.9 * margin, False), (floor - 1.3 * margin, True)):
        odd = with_quotes(chain, [0], call_bids=NONE, call_asks=ask)
        margin_now = 2.0 * infer_forward(odd).line_errors[0]
        assert 0.9 * margin < margin_now < 1.3 * margin
        words = _words(odd)[0].get(("call", 80.0), ())
        assert ("below_intrinsic" in words) is flagged


@pytest.mark.parametrize(
    ("kind", "bids", "asks"), [("call", "call_bids", "call_asks"), ("put", "put_bids", "put_asks")]
)
def test_parity_outlier_blames_the_leg_that_moved(kind, bids, asks):
    chain = quoted(np.linspace(90.0, 110.0, 9))
    odd = with_quotes(chain, [4], **{bids: getattr(chain, bids)[4] + 1.0, asks: getattr(chain, asks)[4] + 1.0})
    (found,) = _words(odd)
    assert [quote for quote, words in found.items() if "parity_outlier" in words] == [(kind, 100.0)]


def test_parity_outlier_blames_both_legs_at_the_end_of_the_chain():
    """No good neighbour on one side: nothing says what the time value should be."""
    chain = quoted(np.linspace(90.0, 110.0, 9))
    odd = with_quotes(chain, [8], call_bids=chain.call_bids[8] + 1.0, call_asks=chain.call_asks[8] + 1.0)
    (found,) = _words(odd)
    assert {quote for quote, words in found.items() if "parity_outlier" in words} == {("call", 110.0), ("put", 110.0)}


def test_vertical_between_two_strikes():
    """The call on less bid over the ask of the call on more; the put on more bid under ... mirrored."""
    both = {("call", 105.0): ("vertical_arbitrage",), ("call", 110.0): ("vertical_arbitrage",)}
    assert _words(_given([105.0, 110.0], calls=[(1.8, 2.0), (2.1, 2.3)])) == [both]
    mirrored = {("put", 95.0): ("vertical_arbitrage",), ("put", 90.0): ("vertical_arbitrage",)}
    assert _words(_given([90.0, 95.0], puts=[(2.1, 2.3), (1.8, 2.0)])) == [mirrored]
    assert _words(_given([105.0, 110.0], calls=[(1.8, 2.0), (2.0, 2.3)])) == [
        {}
    ]  # costs nothing, earns nothing for sure


def test_vertical_beyond_what_the_spread_can_pay():
    """D = 0.9: a 105-110 call spread pays 4.5 at most today, and earns 4.6 when sold."""
    both = {("call", 105.0): ("vertical_arbitrage",), ("call", 110.0): ("vertical_arbitrage",)}
    calls = [(7.7, 7.9), (2.9, 3.1)]
    assert _words(_given([105.0, 110.0], calls=calls, discount_factor=0.9)) == [both]
    assert _words(_given([105.0, 110.0], calls=[(7.5, 7.7), (2.9, 3.1)], discount_factor=0.9)) == [{}]


def test_vertical_beyond_the_maximum():
    """No call is worth more than D F, no put more than D K."""
    assert _words(_given([10.0], calls=[(90.5, 91.0)], discount_factor=0.9)) == [
        {("call", 10.0): ("vertical_arbitrage",)}
    ]
    assert _words(_given([50.0], puts=[(45.5, 46.0)], discount_factor=0.9)) == [
        {("put", 50.0): ("vertical_arbitrage",)}
    ]


def test_vertical_stale_quote_is_blamed_alone():
    """One ask far too low under five sound quotes: each of those is at odds with it alone."""
    calls = [(5.0, 5.1), (4.0, 4.1), (0.9, 1.0), (2.5, 2.6), (2.0, 2.1), (1.6, 1.7)]
    (found,) = _words(_given([101.0, 103.0, 105.0, 107.0, 109.0, 111.0], calls=calls))
    assert [quote for quote, words in found.items() if "vertical_arbitrage" in words] == [("call", 105.0)]


def test_butterfly():
    """2 x 3.2 received, 4.0 + 2.2 paid, and nothing ever owed; three quotes alone cannot tell which is wrong."""
    calls = [(3.8, 4.0), (3.2, 3.4), (2.0, 2.2)]
    (found,) = _words(_given([105.0, 110.0, 115.0], calls=calls))
    assert found == {("call", k): ("butterfly_arbitrage",) for k in (105.0, 110.0, 115.0)}
    (found,) = _words(_given([85.0, 90.0, 95.0], puts=[(2.0, 2.2), (3.2, 3.4), (3.8, 4.0)]))
    assert found == {("put", k): ("butterfly_arbitrage",) for k in (85.0, 90.0, 95.0)}
    assert _words(_given([105.0, 110.0, 115.0], calls=[(3.8, 4.0), (3.1, 3.4), (2.0, 2.2)])) == [{}]


def test_butterfly_with_unequal_wings():
    """(K3 - K1) bid(K2) = 15 x 3.3 = 49.5 > (K3 - K2) ask(K1) + (K2 - K1) ask(K3) = 10 x 4 + 5 x 1.8 = 49."""
    calls = [(3.8, 4.0), (3.3, 3.5), (1.6, 1.8)]
    assert len(_words(_given([105.0, 110.0, 120.0], calls=calls))[0]) == 3
    assert _words(_given([105.0, 110.0, 120.0], calls=[(3.8, 4.0), (3.26, 3.5), (1.6, 1.8)])) == [{}]


def test_butterfly_dear_quote_is_blamed_alone():
    strikes = np.linspace(100.0, 120.0, 9)
    chain = quoted(strikes, half_spread=0.01)
    odd = with_quotes(chain, [4], call_bids=chain.call_bids[4] + 0.5, call_asks=chain.call_asks[4] + 0.5)
    chain = ChainExpiry(0.5, strikes, odd.call_bids, odd.call_asks, *[np.full(9, NONE)] * 2, 100.0, 0.97)
    assert {quote for quote, words in _words(chain)[0].items() if "butterfly_arbitrage" in words} == {("call", 110.0)}


def test_calendar():
    """The same forward and discount: the earlier call bid over the later ask, and over that of two later strikes."""
    early = _given([110.0], calls=[(3.1, 3.3)], years=0.25)
    late = _given([110.0], calls=[(2.8, 3.0)], years=0.5)
    assert _words(early, late) == [{("call", 110.0): ("calendar_arbitrage",)}] * 2
    assert _words(late, early) == [{("call", 110.0): ("calendar_arbitrage",)}] * 2  # in any order of expiries
    between = _given([105.0, 115.0], calls=[(3.7, 3.8), (2.1, 2.3)], years=0.5)  # chord at 110: 3.05 < 3.1
    found = _words(early, between)
    assert found[0] == {("call", 110.0): ("calendar_arbitrage",)}
    assert found[1] == {("call", 105.0): ("calendar_arbitrage",), ("call", 115.0): ("calendar_arbitrage",)}
    dearer = _given([105.0, 115.0], calls=[(3.7, 3.9), (2.1, 2.3)], years=0.5)  # chord 3.1: no gain
    assert _words(early, dearer) == [{}, {}]
    beyond = _given([111.0, 115.0], calls=[(2.5, 2.6), (2.1, 2.3)], years=0.5)  # 110 is outside the later strikes
    assert _words(early, beyond) == [{}, {}]


def test_calendar_is_at_equal_moneyness():
    """F 100 then 110, D 1 then 0.9: strikes 90 and 99 are both 0.9 of the forward, values count per D F, 100 and 99."""
    early = _given([90.0], puts=[(3.1, 3.3)], years=0.25)
    cheap = _given([99.0], puts=[(2.8, 3.0)], years=0.5, forward=110.0, discount_factor=0.9)  # 3.0 / 99 = 3.03 %
    dear = _given([99.0], puts=[(2.8, 3.1)], years=0.5, forward=110.0, discount_factor=0.9)  # 3.1 / 99 = 3.13 %
    assert _words(early, cheap) == [{("put", 90.0): ("calendar_arbitrage",)}, {("put", 99.0): ("calendar_arbitrage",)}]
    assert _words(early, dear) == [{}, {}]


def test_calendar_grants_the_forwards_their_errors():
    """Two fitted forwards that differ by less than their errors: no calendar arbitrage is made of that."""
    strikes = np.linspace(90.0, 110.0, 9)
    early = quoted(strikes, years=0.50, forward=100.0, half_spread=0.3)
    late = quoted(strikes, years=0.5001, forward=100.1, half_spread=0.3)
    tight = [ChainExpiry(c.expiry, c.strikes, *(0.5 * (b + a) for b, a in _both(c)), c.forward) for c in (early, late)]
    fits = [infer_forward(chain) for chain in (early, late)]
    assert fits[0].forward_error > 0.05
    flagged = flag_chain(tight, fits)
    assert not any(np.any(f.calls & QuoteFlag.CALENDAR_ARBITRAGE) for f in flagged)
    exact = [infer_forward(quoted(strikes, years=c.expiry, half_spread=0.0, vol=0.2)) for c in tight]
    flagged = flag_chain(tight, exact)  # the same quotes against forwards taken as exact
    assert any(np.any((f.calls | f.puts) & QuoteFlag.CALENDAR_ARBITRAGE) for f in flagged)


def _both(chain):
    """(bid, ask) for each of the four columns of the locked chain: both ends are the midpoint."""
    calls, puts = (chain.call_bids, chain.call_asks), (chain.put_bids, chain.put_asks)
    return calls, calls, puts, puts


def test_wide():
    """Above three quarters of the midpoint, or four times what is usual around it."""
    assert _words(_given([110.0], calls=[(0.40, 0.95)])) == [{("call", 110.0): ("wide",)}]
    assert _words(_given([110.0], calls=[(0.05, 0.10)])) == [{}]  # one tick bid, two asked
    strikes = np.linspace(100.0, 120.0, 9)
    chain = quoted(strikes, half_spread=0.1, vol=0.5)
    odd = with_quotes(chain, [3], call_bids=chain.call_bids[3] - 0.35, call_asks=chain.call_asks[3] + 0.35)
    assert _words(odd) == [{("call", 107.5): ("wide",)}]
    usual = with_quotes(chain, [3], call_bids=chain.call_bids[3] - 0.25, call_asks=chain.call_asks[3] + 0.25)
    assert _words(usual) == [{}]


def test_an_expiry_without_a_forward_is_still_searched_for_what_needs_none():
    calls = [(3.8, 4.0), (3.2, 3.4), (2.0, 2.2)]
    columns = [list(c) for c in zip(*calls, strict=True)]
    chain = ChainExpiry(0.5, [105.0, 110.0, 115.0], *columns, *[[NONE] * 3] * 2)
    assert set(_words(chain)[0].values()) == {("butterfly_arbitrage",)}


@pytest.mark.parametrize("half_spread", [0.0, 0.01])
@pytest.mark.parametrize("vol", [0.1, 0.6])
def test_no_flag_on_black_chains(half_spread, vol):
    """Black's prices at one volatility are free of static arbitrage; forwards fitted, spreads as tight as none."""
    expiries = [
        quoted(
            np.linspace(100.0 - 100.0 * vol * math.sqrt(t), 100.0 + 120.0 * vol * math.sqrt(t), 40),
            years=t,
            vol=vol,
            forward=100.0 * math.exp(0.02 * t),
            discount_factor=math.exp(-0.03 * t),
            half_spread=half_spread,
        )
        for t in (0.1, 0.25, 0.5, 1.0, 2.0)
    ]
    assert _words(*expiries) == [{}] * 5


def test_no_flag_on_a_heston_surface():
    """A martingale's prices, skewed: no static arbitrage at any spread, here a ten-thousandth of the smallest price."""
    model = MODELS["heston"](v0=0.05, kappa=1.2, theta=0.06, sigma=0.9, rho=-0.75)
    strikes = np.linspace(60.0, 140.0, 40)
    expiries = []
    for t in (0.1, 0.25, 0.5, 1.0, 2.0, 5.0):
        prices = []
        for payoff in (Payoff.CALL, Payoff.PUT):
            one = Slice(
                t, 100.0 * math.exp(0.01 * t), math.exp(-0.03 * t), strikes, np.full(40, payoff, dtype=np.uint8)
            )
            prices.append(price_smiles(model, [one], implied_vols=False)[0].prices)
        half = 1e-4 * np.minimum(*prices)
        columns = [price + sign * half for price in prices for sign in (-1.0, 1.0)]
        expiries.append(ChainExpiry(t, strikes, *columns))
    assert _words(*expiries) == [{}] * 6


# --- the searches against plain loops ---------------------------------------------------------------------------------

TICKS = st.integers(0, 12).map(lambda n: n / 4.0)
SIDE = st.lists(st.tuples(TICKS, TICKS, st.sampled_from([0, 0, 0, 1, 2])), min_size=1, max_size=7)


def _columns(side):
    """Bids and asks with ask >= bid, some missing (1: no bid, 2: no ask)."""
    bids = np.array([NONE if gap == 1 else min(a, b) for a, b, gap in side])
    asks = np.array([NONE if gap == 2 else max(a, b) for a, b, gap in side])
    return np.where(bids > 0.0, bids, NONE), asks


def _vertical_pairs(levels, bids, asks, discount_factor):
    """(sold, bought) of every vertical arbitrage, calls by strike or puts by minus the strike."""
    for i, j in itertools.permutations(range(len(levels)), 2):
        if levels[i] >= levels[j] and bids[i] > asks[j]:
            yield i, j
        if levels[i] <= levels[j] and bids[i] - asks[j] > discount_factor * (levels[j] - levels[i]) + 1e-12:
            yield i, j


def _butterfly_triples(levels, bids, asks, *, vertical_too):
    """With or without those whose body can be bought for less at its own strike, which is a vertical arbitrage."""
    for i, j, k in itertools.permutations(range(len(levels)), 3):
        if not vertical_too and np.any(bids[j] > asks[levels == levels[j]]):
            continue
        low, high = levels[j] - levels[i], levels[k] - levels[j]
        if low > 0 and high > 0 and (low + high) * bids[j] > high * asks[i] + low * asks[k] + 1e-12:
            yield i, j, k


def _calendar_triples(years, of, levels, bids, asks):
    for i in range(len(levels)):
        later = [j for j in range(len(levels)) if years[of[j]] > years[of[i]]]
        for j, k in itertools.product(later, later):
            if of[j] == of[k] and levels[j] <= levels[i] <= levels[k]:
                gap = levels[k] - levels[j]
                weight = (levels[i] - levels[j]) / gap if gap > 0 else 0.0
                if bids[i] > (1 - weight) * asks[j] + weight * asks[k] + 1e-12:
                    yield i, j, k


def _check_search(accused, search):
    """Accused are members of arbitrages, and nothing is left among those not accused, so someone is accused in each."""
    parts = {row for arbitrage in search(np.zeros_like(accused)) for row in arbitrage}
    assert set(np.flatnonzero(accused)) <= parts
    assert list(search(accused)) == []


def _left(bids, asks, out):
    return np.where(out, NONE, bids), np.where(out, NONE, asks)


@given(side=SIDE, discount_factor=st.sampled_from([0.25, 1.0]), calls=st.booleans(), data=st.data())
def test_vertical_and_butterfly_against_plain_loops(side, discount_factor, calls, data):
    bids, asks = _columns(side)
    n = len(side)
    strikes = np.array(
        data.draw(st.lists(st.sampled_from([1.0, 2.0, 3.0, 4.5, 5.0, 7.0, 8.0]), min_size=n, max_size=n))
    )
    make = Ladder.calls if calls else Ladder.puts
    levels = strikes if calls else -strikes
    ladder, nobody = make(strikes, bids, asks, np.zeros(n, dtype=np.int64)), np.zeros(n, dtype=bool)
    accused = vertical(ladder, discount_factors=np.array([discount_factor]), suspects=nobody)
    _check_search(accused, lambda out: _vertical_pairs(levels, *_left(bids, asks, out), discount_factor))
    accused = butterfly(ladder, suspects=nobody)
    triples = _butterfly_triples(levels, bids, asks, vertical_too=True)
    assert set(np.flatnonzero(accused)) <= {row for triple in triples for row in triple}
    assert list(_butterfly_triples(levels, *_left(bids, asks, accused), vertical_too=False)) == []


@given(sides=st.lists(SIDE, min_size=2, max_size=3), calls=st.booleans(), data=st.data())
def test_calendar_against_plain_loops(sides, calls, data):
    side = [quote for one in sides for quote in one]
    of = np.repeat(np.arange(len(sides)), [len(one) for one in sides])
    bids, asks = _columns(side)
    n = len(side)
    strikes = np.array(data.draw(st.lists(st.sampled_from([0.8, 0.9, 1.0, 1.1, 1.3]), min_size=n, max_size=n)))
    years = np.array(data.draw(st.lists(st.sampled_from([0.1, 0.5, 1.0]), min_size=len(sides), max_size=len(sides))))
    make = Ladder.calls if calls else Ladder.puts
    levels = strikes if calls else -strikes
    ladder, nobody = make(strikes, bids, asks, of), np.zeros(n, dtype=bool)
    accused = calendar(ladder, years=years, uncertainties=np.zeros((len(sides), 2)), suspects=nobody)
    _check_search(accused, lambda out: _calendar_triples(years, of, levels, *_left(bids, asks, out)))


def test_suspects_are_accused_first():
    """Two quotes at odds and nothing else to go by: both; with other evidence against one: that one."""
    strikes, bids, asks = np.array([105.0, 110.0]), np.array([1.8, 2.1]), np.array([2.0, 2.3])
    ladder = Ladder.calls(strikes, bids, asks, np.zeros(2, dtype=np.int64))
    for suspects, expected in (([False, False], [True, True]), ([True, False], [True, False])):
        accused = vertical(ladder, discount_factors=np.array([1.0]), suspects=np.array(suspects))
        assert list(accused) == expected


def test_long_garbage_chains_are_cleaned_too():
    """2,000 strikes of noise: more arbitrages than are counted at once, still none is left."""
    random = np.random.default_rng(1)
    n = 2000
    bids = random.uniform(0.5, 1.0, n)
    ladder = Ladder.calls(np.arange(1.0, n + 1.0), bids, bids + 0.1, np.zeros(n, dtype=np.int64))
    nobody = np.zeros(n, dtype=bool)
    accused = vertical(ladder, discount_factors=np.array([1.0]), suspects=nobody)
    kept = np.flatnonzero(~accused)
    assert kept.size > 1
    assert np.all(bids[kept][1:] <= np.minimum.accumulate(bids[kept] + 0.1)[:-1])
    accused = butterfly(ladder, suspects=nobody)
    left = ladder.without(accused, expiries=np.array([0]))
    assert left.rows.size > 1 and not butterfly(left, suspects=nobody).any()


def test_words_of_a_code_come_in_the_order_of_the_flags():
    assert flag_words(0) == ()
    assert flag_words(int(QuoteFlag.WIDE | QuoteFlag.CROSSED)) == ("crossed", "wide")
    assert [flag.word for flag in QuoteFlag] == [
        "crossed",
        "no_bid",
        "below_intrinsic",
        "parity_outlier",
        "vertical_arbitrage",
        "butterfly_arbitrage",
        "calendar_arbitrage",
        "wide",
        "no_ask",
    ]


def test_flags_do_not_depend_on_the_order_of_the_strikes():
    random = np.random.default_rng(8)
    strikes = np.linspace(80.0, 120.0, 30)
    market = {"forward": 100.0, "discount_factor": 0.97, "years": 0.5, "vol": 0.2}
    calls, puts = black_call(strikes, **market), black_put(strikes, **market)
    noise = random.normal(0.0, 0.3, (2, 30)) * (random.random((2, 30)) < 0.2)
    chain = ChainExpiry(0.5, strikes, calls + noise[0] - 0.1, calls + noise[0] + 0.1, puts - 0.1, puts + noise[1] + 0.1)
    order = random.permutation(30)
    shuffled = ChainExpiry(0.5, strikes[order], *(getattr(chain, name)[order] for name in QUOTES))
    (one,), (other,) = _words(chain), _words(shuffled)
    assert one == other and len(one) > 4
