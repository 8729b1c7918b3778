"""Forwards and discount factors: exact on clean chains, robust to bad quotes, with standard errors that cover."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from engine.errors import InputError
from engine.market.chain import ChainExpiry
from engine.market.forwards import ForwardStatus, infer_forward
from engine.market.regression import robust_fit
from tests.unit.market_chain import quoted, with_quotes

STRIKES = np.linspace(70.0, 130.0, 40)
QUOTES = ("call_bids", "call_asks", "put_bids", "put_asks")


def _leaning(random, *, spreads, forward, discount_factor):
    """Every fair value uniform within its own bid-ask interval: the noise the standard errors are stated for."""
    lean = random.uniform(-0.5, 0.5, (2, STRIKES.size)) * spreads
    return quoted(
        STRIKES, forward=forward, discount_factor=discount_factor, vol=0.3, half_spread=0.5 * spreads[0], lean=lean
    )


@pytest.mark.parametrize(("forward", "discount_factor"), [(100.0, 0.97), (98.3, 1.004), (3.2e-3, 0.91), (4.1e6, 0.999)])
@pytest.mark.parametrize("half_spread", [0.0, 1e-4])
def test_clean_chains_give_their_forward_exactly(forward, discount_factor, half_spread):
    """Parity is exact: midpoints at fair value leave nothing but rounding, negative rates (D > 1) included."""
    chain = quoted(
        STRIKES * forward / 100.0,
        forward=forward,
        discount_factor=discount_factor,
        half_spread=half_spread * forward,
    )
    fit = infer_forward(chain)
    assert fit.status is ForwardStatus.FITTED
    assert fit.forward == pytest.approx(forward, rel=1e-13)
    assert fit.discount_factor == pytest.approx(discount_factor, rel=1e-12)
    assert fit.pairs == fit.pairs_used == 40
    assert not fit.outliers.any()
    assert fit.warnings == ()
    assert fit.noise_scale == 1.0


def test_what_is_given_is_respected():
    """A given value comes back as given, without a standard error; the other follows from the quotes."""
    chain = quoted(STRIKES, given_discount_factor=0.97)
    fit = infer_forward(chain)
    assert fit.discount_factor == 0.97 and math.isnan(fit.discount_factor_error)
    assert fit.forward == pytest.approx(100.0, rel=1e-13) and fit.forward_error > 0.0
    fit = infer_forward(quoted(STRIKES, given_forward=100.0))
    assert fit.forward == 100.0 and math.isnan(fit.forward_error)
    assert fit.discount_factor == pytest.approx(0.97, rel=1e-12) and fit.discount_factor_error > 0.0
    fit = infer_forward(quoted(STRIKES, given_forward=101.0, given_discount_factor=0.9))
    assert (fit.forward, fit.discount_factor, fit.status) == (101.0, 0.9, ForwardStatus.GIVEN)
    assert math.isnan(fit.forward_error) and math.isnan(fit.discount_factor_error)
    assert fit.pairs == 40 and fit.pairs_used < 40  # the quotes say otherwise, and that is reported
    assert any("disagree" in words for words in fit.warnings)


def test_standard_errors_are_those_of_the_textbook_line():
    """Equal spreads w: var(y) = w^2 / 6; ordinary least squares gives var(D) = var(y) / Sxx and, about the mean strike,
    var(F) = var(y) (1 / n + (F - mean K)^2 / Sxx) / D^2 (any regression textbook, delta method)."""
    half = 0.15
    fit = infer_forward(quoted(STRIKES, forward=112.0, half_spread=half, vol=0.4, years=1.0))
    variance = (2.0 * half) ** 2 / 6.0
    sxx = np.sum((STRIKES - STRIKES.mean()) ** 2)
    assert fit.discount_factor_error == pytest.approx(math.sqrt(variance / sxx), rel=1e-9)
    spread_of_forward = variance * (1.0 / 40.0 + (112.0 - STRIKES.mean()) ** 2 / sxx) / 0.97**2
    assert fit.forward_error == pytest.approx(math.sqrt(spread_of_forward), rel=1e-9)
    line = np.sqrt(variance * (1.0 / 40.0 + (STRIKES - STRIKES.mean()) ** 2 / sxx))
    assert fit.line_errors == pytest.approx(line, rel=1e-9)


def test_standard_errors_cover():
    """Fair values uniform in their bid-ask intervals, spreads unequal, seeds fixed. z-scores of 600 chains are standard
    normal by the central limit theorem over 40 pairs: Kolmogorov-Smirnov against scipy's normal law, and 95 % within
    two errors."""
    random = np.random.default_rng(2003)
    scores = []
    for _ in range(600):
        spreads = np.tile(random.uniform(0.1, 0.5, STRIKES.size), (2, 1))
        fit = infer_forward(_leaning(random, spreads=spreads, forward=103.0, discount_factor=0.95))
        scores.append(
            ((fit.forward - 103.0) / fit.forward_error, (fit.discount_factor - 0.95) / fit.discount_factor_error)
        )
    for column in np.array(scores).T:
        assert stats.kstest(column, "norm").pvalue > 0.01
        assert 0.93 <= np.mean(np.abs(column) <= 2.0) <= 0.975


def test_noise_beyond_the_spreads_widens_the_errors():
    """Midpoints off by five spreads (normal noise): the residuals say so, and the errors still cover. The scale is
    meant to err upward by its small-sample factor 1 + 5 / (n - 2) (Rousseeuw and Leroy 1987, from memory), not more."""
    random = np.random.default_rng(7)
    scores, scales = [], []
    for _ in range(300):
        lean = 0.2 * random.standard_normal((2, STRIKES.size))
        fit = infer_forward(quoted(STRIKES, half_spread=0.02, lean=lean, vol=0.6))
        scores.append((fit.forward - 100.0) / fit.forward_error)
        scales.append(fit.noise_scale)
        assert any("times what the spreads explain" in words for words in fit.warnings)
    expected = 0.2 / (0.04 / math.sqrt(12.0))
    assert 1.0 <= np.median(scales) / expected <= 1.0 + 5.0 / 38.0
    assert np.mean(np.abs(scores) <= 2.0) >= 0.93


@pytest.mark.parametrize("share", [0.2, 0.3, 0.4])
@pytest.mark.parametrize("kind", ["stale", "scattered", "far"])
def test_bad_quotes_do_not_move_the_forward(share, kind):
    """20 to 40 % of the pairs bad: all stale from one other level of the forward (the hard case: they agree with each
    other), scattered either way, or off by a factor. The fit stays within four standard errors; plain least squares
    does not, so the test has teeth."""
    random = np.random.default_rng(int(100 * share))
    plain_misses = 0
    for _ in range(20):
        spreads = np.full((2, STRIKES.size), 0.1)
        chain = _leaning(random, spreads=spreads, forward=100.0, discount_factor=0.97)
        rows = random.permutation(STRIKES.size)[: round(share * STRIKES.size)]
        if kind == "stale":
            old = _leaning(random, spreads=spreads, forward=97.0, discount_factor=0.97)
            shifts = old.call_bids[rows] - chain.call_bids[rows]
        elif kind == "scattered":
            shifts = random.choice([-1.0, 1.0], rows.size) * random.uniform(1.0, 9.0, rows.size)
        else:
            shifts = 9.0 * chain.call_bids[rows]
        shifts = np.maximum(shifts, 0.01 - chain.call_bids[rows])
        bad = with_quotes(
            chain, rows, call_bids=chain.call_bids[rows] + shifts, call_asks=chain.call_asks[rows] + shifts
        )
        fit = infer_forward(bad)
        assert fit.status is ForwardStatus.FITTED
        assert abs(fit.forward - 100.0) <= 4.0 * fit.forward_error
        assert abs(fit.discount_factor - 0.97) <= 4.0 * fit.discount_factor_error
        far = rows[np.abs(shifts) > 1.0]
        assert fit.outliers[far].all()
        assert np.count_nonzero(np.delete(fit.outliers, rows)) <= 2
        slope, level = np.polyfit(STRIKES, bad.call_mids - bad.put_mids, 1)
        plain_misses += abs(-level / slope - 100.0) > 4.0 * fit.forward_error
    assert plain_misses >= 15


def test_no_pair_that_agrees_is_left_out():
    """Fair values at the very ends of the bid-ask intervals, bad pairs among them: a pair whose executable interval
    contains the fitted line is never called an outlier, and those that are disagree with it."""
    random = np.random.default_rng(5)
    seen = 0
    for _ in range(50):
        lean = random.choice([-1.0, 1.0], (2, STRIKES.size)) * random.uniform(0.05, 0.1, (2, STRIKES.size))
        lean[0, :6] += 1.0
        chain = quoted(STRIKES, half_spread=0.1, lean=lean, vol=0.6)
        fit = infer_forward(chain)
        line = fit.discount_factor * (fit.forward - STRIKES)
        contains = (chain.call_bids - chain.put_asks <= line) & (line <= chain.call_asks - chain.put_bids)
        assert not np.any(fit.outliers & contains)
        seen += np.count_nonzero(fit.outliers)
    assert seen >= 300


def test_only_two_sided_pairs_count():
    chain = quoted(STRIKES, half_spread=0.001)
    chain = with_quotes(chain, [3], call_bids=np.nan)
    chain = with_quotes(chain, [5], put_asks=np.nan)
    chain = with_quotes(chain, [7], put_bids=0.0)
    chain = with_quotes(chain, [9], call_bids=chain.call_asks[9], call_asks=chain.call_bids[9])
    fit = infer_forward(chain)
    assert fit.pairs == fit.pairs_used == 36
    assert fit.forward == pytest.approx(100.0, rel=1e-12)


def test_too_few_pairs_have_a_status_and_a_reason():
    one = quoted([100.0])
    fit = infer_forward(one)
    assert fit.status is ForwardStatus.TOO_FEW_PAIRS and not fit.known and fit.pairs == 1
    assert math.isnan(fit.forward) and math.isnan(fit.discount_factor)
    assert fit.warnings and "1 strike" in fit.warnings[0]
    nothing = with_quotes(quoted(STRIKES), call_bids=np.nan)
    assert infer_forward(nothing).status is ForwardStatus.TOO_FEW_PAIRS
    assert infer_forward(quoted([])).status is ForwardStatus.TOO_FEW_PAIRS
    with_discount = quoted([95.0], given_discount_factor=0.97)
    fit = infer_forward(with_discount)  # one pair and one unknown: enough, with a warning
    assert fit.known and fit.forward == pytest.approx(100.0, rel=1e-13)
    assert any("nothing checks" in words for words in fit.warnings)
    keeps = infer_forward(with_quotes(quoted([95.0, 96.0], given_forward=99.0), call_bids=np.nan))
    assert keeps.status is ForwardStatus.TOO_FEW_PAIRS and keeps.forward == 99.0


def test_no_line_through_one_strike_and_none_that_is_no_market():
    same = quoted([100.0, 100.0, 100.0])
    assert infer_forward(same).status is ForwardStatus.DEGENERATE
    at_forward = quoted([100.0, 100.0], given_forward=100.0)
    assert infer_forward(at_forward).status is ForwardStatus.DEGENERATE
    rising = ChainExpiry(1.0, [90.0, 100.0, 110.0], [1, 5, 9], [1.1, 5.1, 9.1], [9, 5, 1], [9.1, 5.1, 1.1])
    fit = infer_forward(rising)
    assert fit.status is ForwardStatus.DEGENERATE and "not a market" in fit.warnings[0]
    for years in (0.0, -1.0, math.nan, math.inf):
        dead = ChainExpiry(years, rising.strikes, *(getattr(rising, name) for name in QUOTES))
        assert infer_forward(dead).status is ForwardStatus.EXPIRED


def test_three_pairs_that_disagree_are_undecided():
    """With three pairs and two unknowns nothing tells which is wrong: all are kept and the answer says so."""
    chain = quoted([90.0, 100.0, 110.0], half_spread=0.01)
    fit = infer_forward(with_quotes(chain, [1], call_bids=chain.call_bids[1] + 3.0, call_asks=chain.call_asks[1] + 3.0))
    assert fit.pairs_used == 3
    assert any("too few to tell" in words for words in fit.warnings)
    assert abs(fit.forward - 100.0) <= 2.0 * fit.forward_error  # the residuals have widened the error


def test_four_pairs_tell_the_bad_one():
    chain = quoted([90.0, 97.0, 103.0, 110.0], half_spread=0.01, vol=0.4)
    bad = with_quotes(chain, [2], call_bids=chain.call_bids[2] + 3.0, call_asks=chain.call_asks[2] + 3.0)
    fit = infer_forward(bad)
    assert list(fit.outliers) == [False, False, True, False]
    assert fit.forward == pytest.approx(100.0, rel=1e-12)


def test_units_that_cannot_be_are_called_out():
    """Months taken for years: a discount factor of 0.97 over 0.04 years is a rate of 76 %."""
    fit = infer_forward(quoted(STRIKES, years=0.04, vol=0.9, half_spread=0.001))
    assert any("check units and dates" in words for words in fit.warnings)


def test_quotes_without_a_spread_that_disagree_are_judged_by_their_residuals():
    random = np.random.default_rng(3)
    lean = np.maximum(0.05 * random.standard_normal((2, STRIKES.size)), -0.05)
    fit = infer_forward(quoted(STRIKES, half_spread=0.0, lean=lean, vol=0.6))
    assert 0.0 < fit.forward_error < 0.1
    assert abs(fit.forward - 100.0) <= 4.0 * fit.forward_error


@given(factor=st.floats(1e-6, 1e6), seed=st.integers(0, 50))
def test_scaling_the_currency_scales_the_forward(factor, seed):
    """Exact law: prices and strikes in another unit, forward and its error in that unit, discount factor unchanged."""
    random = np.random.default_rng(seed)
    chain = _leaning(random, spreads=np.full((2, 40), 0.2), forward=100.0, discount_factor=0.97)
    scaled = ChainExpiry(chain.expiry, factor * chain.strikes, *(factor * getattr(chain, name) for name in QUOTES))
    one, other = infer_forward(chain), infer_forward(scaled)
    assert other.forward == pytest.approx(factor * one.forward, rel=1e-10)
    assert other.forward_error == pytest.approx(factor * one.forward_error, rel=1e-6)
    assert other.discount_factor == pytest.approx(one.discount_factor, rel=1e-9)


@given(seed=st.integers(0, 50))
def test_the_order_of_the_strikes_does_not_matter(seed):
    random = np.random.default_rng(seed)
    chain = _leaning(random, spreads=np.full((2, 40), 0.2), forward=100.0, discount_factor=0.97)
    chain = with_quotes(chain, [4, 8], call_bids=chain.call_bids[[4, 8]] + 5.0, call_asks=chain.call_asks[[4, 8]] + 5.0)
    order = random.permutation(40)
    other = infer_forward(ChainExpiry(0.5, chain.strikes[order], *(getattr(chain, name)[order] for name in QUOTES)))
    one = infer_forward(chain)
    assert other.forward == pytest.approx(one.forward, rel=1e-12)
    assert np.array_equal(other.outliers, one.outliers[order])


def test_long_chains_draw_their_subsets_and_stay_robust():
    """3,000 strikes, 40 % of them stale: more pairs of pairs than are tried."""
    strikes = np.linspace(60.0, 140.0, 3000)
    chain = quoted(strikes, half_spread=0.05, vol=0.5)
    random = np.random.default_rng(9)
    rows = random.permutation(3000)[:1200]
    fit = infer_forward(
        with_quotes(chain, rows, call_bids=chain.call_bids[rows] + 2.0, call_asks=chain.call_asks[rows] + 2.0)
    )
    assert fit.pairs_used == 1800
    assert fit.forward == pytest.approx(100.0, rel=1e-10)


PRICES = st.one_of(st.just(math.nan), st.sampled_from([0.0, 1.0, 1e-300, 1e300]), st.floats(0.0, 200.0))
ROWS = st.lists(st.tuples(st.sampled_from([50.0, 90.0, 100.0, 100.0, 110.0, 1e9]), *[PRICES] * 4), max_size=12)


@given(rows=ROWS, forward=st.sampled_from([None, 100.0]), discount=st.sampled_from([None, 0.97]))
def test_no_chain_whatever_raises(rows, forward, discount):
    """Garbage in: a status out, and finite numbers wherever the status says fitted."""
    columns = np.array(rows, dtype=float).reshape(-1, 5).T
    fit = infer_forward(ChainExpiry(0.5, *columns, forward, discount))
    if fit.known:
        assert fit.forward > 0.0 and fit.discount_factor > 0.0
        assert math.isfinite(fit.forward) and math.isfinite(fit.discount_factor)
    else:
        assert fit.warnings
    assert 0 <= fit.pairs_used <= fit.pairs <= len(rows)


def test_a_kept_set_without_a_line_is_undecided():
    """All but one observation at the same place: the line hangs on a single one, and that is said."""
    design = np.array([[1.0, 0.0]] * 5 + [[1.0, 1.0]])
    fit = robust_fit(design, np.array([0.0, 0.0, 0.0, 5.0, -5.0, 3.0]), np.full(6, 0.1))
    assert np.all(np.isfinite(fit.coefficients)) and np.all(np.isfinite(fit.covariance))


@pytest.mark.parametrize(
    ("change", "argument"),
    [
        ({"strikes": [90.0, -1.0]}, "strikes"),
        ({"strikes": [90.0, math.nan]}, "strikes"),
        ({"strikes": [90.0, 1e16]}, "strikes"),
        ({"call_bids": [1.0]}, "call_bids"),
        ({"put_asks": [[1.0, 2.0]]}, "put_asks"),
        ({"put_bids": ["dear", 1.0]}, "put_bids"),
        ({"forward": 0.0}, "forward"),
        ({"discount_factor": math.inf}, "discount_factor"),
    ],
)
def test_chains_that_are_no_chains_are_refused_by_name(change, argument):
    sound = {
        "strikes": [90.0, 100.0],
        **{name: [1.0, 1.0] for name in QUOTES},
        "forward": None,
        "discount_factor": None,
    }
    with pytest.raises(InputError) as caught:
        ChainExpiry(0.5, **{**sound, **change})
    assert caught.value.argument == argument


def test_negative_and_infinite_quotes_are_no_quotes():
    chain = ChainExpiry(0.5, [90.0, 100.0], [-1.0, 1.0], [math.inf, 1.2], [1.0, 1.0], [1.2, 1e300])
    assert math.isnan(chain.call_bids[0]) and math.isnan(chain.call_asks[0]) and math.isnan(chain.put_asks[1])
    assert chain.impossible == 3


def test_bad_observations_that_agree_do_not_pass_for_noise():
    """Forty observations, noise uniform in two intervals (deviation one), sixteen of them off by six deviations to the
    same side: a scale taken from all residuals hides them; the deviations known beforehand do not."""
    random = np.random.default_rng(1984)
    positions = np.linspace(-30.0, 30.0, 40)
    design = np.column_stack([np.ones(40), -positions])
    scores, found = [], []
    for _ in range(200):
        values = random.uniform(-1.0, 1.0, (2, 40)).sum(axis=0) * math.sqrt(1.5)
        bad = random.permutation(40)[:16]
        values[bad] += 6.0
        fit = robust_fit(design, values, np.ones(40))
        scores.append(fit.coefficients[0] / math.sqrt(fit.covariance[0, 0]))
        found.append(np.mean(~fit.kept[bad]))
    assert np.mean(np.abs(scores) <= 2.0) >= 0.8
    assert np.mean(found) >= 0.9
