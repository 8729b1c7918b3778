"""Laws every price must obey, for every model on every kind of contour, and the bound against the reference.

Contours: ``planned`` is what the engine chooses by predicted cost, ``plain`` prefers the straight line up to 60,000
nodes, ``deformed`` bends every row. Inequalities (monotone, convex) are allowed the stated bounds and nothing more.
"""

from __future__ import annotations

import math
from functools import cache
from typing import Any

import numpy as np
import pytest

from engine import MODELS, Payoff, PricedSlice, Slice, Status, price_smiles
from engine.models.heston import Heston
from engine.transform import plan, plan_cache
from tests.properties.parameter_sets import DIMENSIONS, expiry, pair, twins
from tests.properties.verdict import Quotes, Verdict, judge, quotes

EPS = float(np.finfo(np.float64).eps)
HOUR = 1.0 / 8760.0
SEEDS = [0, 1, *(pytest.param(seed, marks=pytest.mark.long) for seed in (2, 3))]
LIMITS = {"planned": plan.PLAIN_LIMIT, "plain": 60_000, "deformed": 0}
over_models = pytest.mark.parametrize("name", list(MODELS))
over_seeds = pytest.mark.parametrize("seed", SEEDS)


@pytest.fixture(params=list(LIMITS))
def contour(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> Any:
    plan_cache.clear()
    monkeypatch.setattr(plan, "PLAIN_LIMIT", LIMITS[request.param])
    yield request.param
    plan_cache.clear()


def _case(name: str, seed: int) -> tuple[Any, Any, float]:
    """A model, its twin and an expiry from an hour to fifty years; sets without randomness are drawn again."""
    rng = np.random.default_rng([seed, 41, len(name)])
    while True:
        u = [float(x) for x in rng.random(DIMENSIONS[name] + 1)]
        model, twin = pair(name, u[:-1])
        tau = expiry(u[-1], low=HOUR, high=50.0)
        if float(np.reshape(model.mean_variance(tau), -1)[0]) > 0.0:
            return model, twin, tau


@cache
def _quotes(name: str, seed: int) -> tuple[Any, Quotes]:
    """Quotes as far as ten standard deviations, digital ones too; the same for every contour."""
    model, twin, tau = _case(name, seed)
    inner = np.random.default_rng([seed, 5]).uniform(-5.0, 5.0, 3)
    return model, quotes(model, twin, tau, [-10.0, *inner, 0.0, 10.0], digitals=True)


def _strikes(model: Any, tau: float, distances: np.ndarray, forward: float = 100.0) -> np.ndarray:
    return forward * np.exp(math.sqrt(float(np.reshape(model.mean_variance(tau), -1)[0])) * distances)


def _price(model: Any, tau: float, strikes: np.ndarray, payoff: Payoff, **options: Any) -> PricedSlice:
    one = Slice(tau, options.pop("forward", 100.0), options.pop("discount", 1.0), strikes, _payoffs(strikes, payoff))
    return price_smiles(model, [one], **{"implied_vols": False, **options})[0]


def _payoffs(strikes: np.ndarray, payoff: Payoff) -> np.ndarray:
    return np.full(strikes.shape, payoff, dtype=np.uint8)


@over_models
@over_seeds
def test_bound_covers_the_error(name: str, seed: int, contour: str) -> None:
    model, asked = _quotes(name, seed)
    tally = Verdict()
    for tolerance in (1e-10, float(10.0 ** np.random.default_rng(seed).uniform(-12.0, -4.0))):
        tally.add(judge(model, asked, tolerance=tolerance))
    assert tally.unknown <= 0.2 * tally.prices
    assert not tally.faults, "\n".join(tally.faults)


@pytest.mark.long
@over_models
def test_bound_covers_the_error_at_length(name: str, contour: str) -> None:
    tally = Verdict()
    for seed in range(100, 500):
        model, asked = _quotes(name, seed)
        plan_cache.clear()
        tally.add(judge(model, asked, tolerance=float(10.0 ** np.random.default_rng(seed).uniform(-12.0, -4.0))))
    print(f"{name} on {contour} contours: {tally}")
    assert tally.unknown <= 0.02 * tally.prices
    assert not tally.faults, "\n".join(tally.faults[:20])


# Jumps on little diffusion or none: atoms, densities of several scales, a characteristic function that never dies out.
PURE_JUMPS = [
    (0.0, 0.7, -0.1, 0.2),
    (0.0, 0.7, -0.1, 0.0),
    (0.0, 50.0, -0.1, 0.2),
    (0.0, 1.0, 0.0, 0.3),
    (1e-3, 0.7, -0.1, 0.0),
    (1e-3, 20.0, 0.05, 0.0),
    (1e-3, 50.0, -0.1, 0.01),
    (0.2, 0.7, -0.1, 0.0),
    (0.2, 0.0, -0.1, 0.2),
    (0.2, 1.0, 0.0, 0.0),
    (2.0, 100.0, 1.0, 1.0),
    (0.1, 5.0, 1.0, 2.0),
]


@pytest.mark.parametrize("values", PURE_JUMPS)
@pytest.mark.parametrize("tau", [1.0 / 365.0, 1.0, pytest.param(10.0, marks=pytest.mark.long)])
def test_jumps_without_much_diffusion(values: tuple[float, ...], tau: float) -> None:
    """Against Merton's series; a variance factor at rest (Bates, v0 = theta = 0) is Merton without diffusion."""
    volatility, *jumps = values
    names = ("jump_intensity", "jump_mean", "jump_stdev")
    by_name = dict(zip(names, jumps, strict=True))
    model, twin = twins("merton", {"volatility": volatility, **by_name})
    models = [model]
    if volatility == 0.0:
        models.append(MODELS["bates"](v0=0.0, kappa=1.0, theta=0.0, sigma=0.5, rho=-0.5, **by_name))
    spread = math.sqrt(float(model.mean_variance(tau)))
    distances = np.array([-3.1, -0.63, -0.2345, -0.021, 0.0133, 0.4, 2.2]) / spread
    asked = quotes(model, twin, tau, distances.tolist(), digitals=True)
    for one in models:
        for tolerance in (1e-10, 1e-6):
            verdict = judge(one, asked, tolerance=tolerance)
            assert not verdict.faults, "\n".join(verdict.faults)


@over_models
@over_seeds
def test_parity_and_static_bounds(name: str, seed: int, contour: str) -> None:
    model, _, tau = _case(name, seed)
    forward, discount = 123.456, 0.97
    strikes = _strikes(model, tau, np.linspace(-10.0, 10.0, 41), forward)
    options = {"forward": forward, "discount": discount}
    call = _price(model, tau, strikes, Payoff.CALL, **options).prices
    put = _price(model, tau, strikes, Payoff.PUT, **options).prices
    most = discount * np.maximum(forward, strikes)
    assert np.all(np.abs(call - put - discount * (forward - strikes)) <= 8.0 * EPS * most)
    for value, low, high in ((call, forward - strikes, forward), (put, strikes - forward, strikes)):
        assert np.all(value >= np.maximum(discount * low, 0.0) * (1.0 - 4.0 * EPS))
        assert np.all(value <= discount * high * (1.0 + 4.0 * EPS))
    above = _price(model, tau, strikes, Payoff.DIGITAL_CALL, **options).prices
    below = _price(model, tau, strikes, Payoff.DIGITAL_PUT, **options).prices
    assert np.all(np.abs(above + below - discount) <= 8.0 * EPS)
    assert np.all((above >= 0.0) & (above <= discount) & (below >= 0.0) & (below <= discount))


@over_models
@over_seeds
def test_decreasing_and_convex_in_strike(name: str, seed: int, contour: str) -> None:
    model, _, tau = _case(name, seed)
    strikes = _strikes(model, tau, np.linspace(-8.0, 8.0, 161))
    found = _price(model, tau, strikes, Payoff.CALL)
    gap, fall = np.diff(strikes), -np.diff(found.prices)
    room = found.error_bounds[:-1] + found.error_bounds[1:]
    assert np.all(fall >= -room)
    assert np.all(fall <= gap * (1.0 + 4.0 * EPS) + room)
    rate, slack = fall / gap, room / gap  # minus the slope: falls with the strike where prices are convex
    assert np.all(np.diff(rate) <= slack[:-1] + slack[1:] + 4.0 * EPS)
    above = _price(model, tau, strikes, Payoff.DIGITAL_CALL)
    assert np.all(np.diff(above.prices) <= above.error_bounds[:-1] + above.error_bounds[1:])
    # Between two strikes the fall of the call lies between the digital values at them (mean value theorem).
    assert np.all(rate <= above.prices[:-1] + above.error_bounds[:-1] + slack + 4.0 * EPS)
    assert np.all(rate >= above.prices[1:] - above.error_bounds[1:] - slack - 4.0 * EPS)


@over_models
def test_batch_equals_one_by_one(name: str, contour: str) -> None:
    cases = [_case(name, seed) for seed in range(12)]
    distances = np.linspace(-6.0, 6.0, 25)
    slices = [
        Slice(tau, 100.0 + i, 0.99, s := _strikes(model, tau, distances, 100.0 + i), _payoffs(s, Payoff.OTM))
        for i, (model, _, tau) in enumerate(cases)
    ]
    models = [model for model, _, _ in cases]
    together = price_smiles(models, slices)
    plan_cache.clear()
    alone = [price_smiles(model, [one])[0] for model, one in zip(models, slices, strict=True)]
    backward = price_smiles(models[::-1], slices[::-1])[::-1]  # from kept rows now
    for a, b, c in zip(together, alone, backward, strict=True):
        assert a.transform.exponents == pytest.approx(b.transform.exponents, rel=1e-12)
        for other in (b, c):
            assert np.all(np.abs(a.prices - other.prices) <= 0.5 * (a.error_bounds + other.error_bounds))
            assert np.array_equal(a.statuses, other.statuses)
            assert np.allclose(a.implied_vols, other.implied_vols, rtol=1e-8, equal_nan=True)


@over_models
@over_seeds
def test_order_repeats_and_company_do_not_matter(name: str, seed: int, contour: str) -> None:
    """One strike alone, a prime number of them, repeats, any order: the same numbers within their bounds."""
    model, _, tau = _case(name, seed)
    strikes = _strikes(model, tau, np.random.default_rng(seed).uniform(-6.0, 6.0, 53))
    sent = np.concatenate([strikes, strikes[::-1], strikes[:1]])
    found = _price(model, tau, sent, Payoff.OTM)
    half = 0.5 * found.error_bounds[:53]
    assert np.all(np.abs(found.prices[:53] - found.prices[53:106][::-1]) <= half)
    assert np.allclose(found.error_bounds[:53], found.error_bounds[53:106][::-1], rtol=1e-9, atol=0.0)
    assert abs(found.prices[106] - found.prices[0]) <= half[0]
    in_order = _price(model, tau, np.sort(strikes), Payoff.OTM)
    assert np.all(np.abs(in_order.prices - found.prices[:53][np.argsort(strikes)]) <= half[np.argsort(strikes)])
    for i in (0, 17, 52):
        one = _price(model, tau, strikes[i : i + 1], Payoff.OTM)
        assert abs(one.prices[0] - found.prices[i]) <= one.error_bounds[0] + found.error_bounds[i]


@over_models
@over_seeds
def test_homogeneous_in_forward_and_strike(name: str, seed: int) -> None:
    model, _, tau = _case(name, seed)
    strikes = _strikes(model, tau, np.linspace(-6.0, 6.0, 31))
    base = _price(model, tau, strikes, Payoff.CALL)
    for factor in (2.0**-20, 2.0**30):  # powers of two: nothing is rounded on the way
        scaled = _price(model, tau, factor * strikes, Payoff.CALL, forward=factor * 100.0)
        assert np.array_equal(scaled.prices, factor * base.prices)
        assert np.array_equal(scaled.error_bounds, factor * base.error_bounds)


@pytest.mark.parametrize("seed", [*range(3), *(pytest.param(seed, marks=pytest.mark.long) for seed in range(3, 8))])
def test_symmetric_smile_at_zero_correlation(seed: int, contour: str) -> None:
    """At rho = 0 the call at F e^k is worth e^k puts at F e^-k: the smile is symmetric in ln(K/F)."""
    model, _, tau = _case("heston", seed)
    even = Heston(model.v0, model.kappa, model.theta, model.sigma, 0.0)
    s = math.sqrt(float(even.mean_variance(tau)))
    growth = np.exp(s * np.linspace(0.0, 6.0, 13))
    call = _price(even, tau, 100.0 * growth, Payoff.CALL)
    put = _price(even, tau, 100.0 / growth, Payoff.PUT)
    difference = np.abs(call.prices - growth * put.prices)
    rounding = 40.0 * EPS * (1.0 + s) * call.prices * np.maximum(1.0, 36.0 / s)  # of exp and of the strikes
    assert np.all(difference <= call.error_bounds + growth * put.error_bounds + rounding)


# R. Lee, "The moment formula for implied volatility at extreme strikes", Math. Finance 14(3), 2004 (formula from
# memory): limsup I^2 T / |k| = beta, from the critical moments. Slopes recomputed in 40-digit arithmetic. In Heston's
# model I sqrt(T) = b1 sqrt|k| + b2 + O(log|k| / sqrt|k|) with b1^2 = beta (P. Friz, S. Gerhold, A. Gulisashvili, S.
# Sturm, "On refined volatility smile expansion in the Heston model", Quant. Finance 11(8), 2011, from memory).
LEE = [
    (Heston(0.0175, 1.5768, 0.0398, 0.5751, -0.5711), 1.0, 0.0357227053293, 0.0921658996303),
    (Heston(0.0175, 1.5768, 0.0398, 0.5751, -0.5711), 10.0, 0.0688197999668, 0.240738784889),
    (Heston(0.04, 4.0, 0.25, 1.0, -0.5), 1.0, 0.0447029088917, 0.110530741464),
    (Heston(0.04, 0.5, 0.04, 1.0, -0.9), 10.0, 0.0509451789807, 0.798969081914),
]


@pytest.mark.parametrize(("model", "tau", "right", "left"), LEE)
def test_lee_wing_slopes(model: Heston, tau: float, right: float, left: float) -> None:
    low, high = (float(np.reshape(edge, -1)[0]) for edge in model.strip(tau))
    for sign, beta, rate in ((1.0, right, high - 1.0), (-1.0, left, 1.0 - low)):
        k = np.linspace(100.0, 430.0, 12) / rate  # values down to exp(-430)
        strikes = 100.0 * np.exp(sign * k)
        one = Slice(tau, 100.0, 1.0, strikes, _payoffs(strikes, Payoff.OTM))
        found = price_smiles(model, [one])[0]
        assert np.all(found.statuses == Status.OK)
        deviation = found.implied_vols * math.sqrt(tau)
        terms = np.stack([np.sqrt(k), np.ones_like(k), np.log(k) / np.sqrt(k), 1.0 / np.sqrt(k)], axis=1)
        fitted = np.linalg.lstsq(terms, deviation, rcond=None)[0]
        assert fitted[0] ** 2 == pytest.approx(beta, rel=1e-2)  # an extrapolation: the next terms are not in the fit
        assert np.all(deviation**2 <= 2.0 * k)  # no slope above 2, whatever the model
