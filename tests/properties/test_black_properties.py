"""Laws of Black's formula that hold for every draw: bounds, order, symmetry, parity, its differential equation; and its
Greeks against differentiation of the textbook formula in multiple precision."""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from engine.black import black_greeks, log_otm_value, otm_value, total_deviation
from engine.status import Status

EPS = float(np.finfo(np.float64).eps)

deviations = st.floats(math.log(1e-6), math.log(12.0)).map(math.exp)
places = st.floats(-6.0, 6.0).map(lambda root: root * abs(root))  # k / s, up to 36 either way


@settings(max_examples=300)
@given(s=deviations, place=places, grow=st.floats(math.log(1e-9), 0.0).map(math.exp))
def test_value_increases_with_deviation(s, place, grow):
    """Never less by more than its rounding; more, wherever the law asks for more than that."""
    k, s2 = place * s, s * (1.0 + grow)
    low, high = float(otm_value(k, s)), float(otm_value(k, s2))
    log_gain = float(log_otm_value(k, s2)) - float(log_otm_value(k, s))
    bound = math.exp(min(k, 0.0))
    assert 0.0 <= low <= bound * (1.0 + EPS) and 0.0 <= high <= bound * (1.0 + EPS)
    assert high >= low * (1.0 - 8.0 * EPS)
    vega = math.exp(-0.5 * (place - 0.5 * s) ** 2) / math.sqrt(2.0 * math.pi)
    assume(low > 1e-290)
    expected = vega * s * grow / low  # to first order; the steepness of k/s sets the rounding
    if expected > 64.0 * EPS * (1.0 + place * place):
        assert high > low and log_gain > 0.0


@settings(max_examples=300)
@given(s=deviations, place=places)
def test_put_call_symmetry(s, place):
    """``v(-k) = e^-k v(k)``: exchange of forward and strike."""
    k = place * s
    call, put = float(otm_value(abs(k), s)), float(otm_value(-abs(k), s))
    assert put == pytest.approx(call * math.exp(-abs(k)), rel=4 * EPS, abs=1e-307)


@settings(max_examples=200)
@given(
    s=st.floats(0.01, 3.0),
    middle=st.floats(-3.0, 3.0),
    left=st.floats(1e-3, 1.0),
    right=st.floats(1e-3, 1.0),
)
def test_calls_decrease_and_are_convex_in_strike(s, middle, left, right):
    """Whichever side of the forward the three strikes lie; forward 1."""
    k = np.array([middle - left, middle, middle + right])
    strike = np.exp(k)
    call = otm_value(k, s) + np.maximum(1.0 - strike, 0.0)
    slack = 16.0 * EPS
    assert (
        np.all(np.diff(call) <= slack) and np.all(call >= np.maximum(1.0 - strike, 0.0)) and np.all(call <= 1.0 + EPS)
    )
    slopes = np.diff(call) / np.diff(strike)
    assert slopes[1] - slopes[0] >= -slack * (1.0 / np.diff(strike).min())
    assert -1.0 - slack / np.diff(strike).min() <= slopes[0]


@settings(max_examples=300)
@given(k=st.floats(-20.0, 20.0), log_part=st.floats(-600.0, -1e-6), grow=st.floats(-20.0, -1.0).map(math.exp))
def test_inverse_increases_with_value(k, log_part, grow):
    """A larger value never has a smaller volatility, and what comes back reprices to what went in."""
    bound = math.exp(min(k, 0.0))
    low = math.exp(log_part) * bound
    high = low + (bound - low) * grow * math.exp(log_part)
    assume(low > 1e-290 and low < high < bound)
    found = total_deviation(np.array([k, k]), np.array([low, high]))
    assert np.all(found.statuses == Status.OK)
    assert found.deviations[1] >= found.deviations[0] * (1.0 - 32.0 * EPS)
    s = found.deviations
    steep = 1.0 + (k / s) ** 2 + 0.25 * s * s
    assert np.all(np.abs(otm_value(k, s) - [low, high]) <= 16.0 * EPS * steep * [low, high])


@settings(max_examples=200)
@given(s=st.floats(1e-3, 4.0), place=st.floats(-8.0, 8.0), expiry=st.floats(1e-3, 30.0))
def test_parity_and_the_differential_equation(s, place, expiry):
    """Call minus put is forward minus strike; value by Euler's theorem; decay by Black's equation."""
    k = place * s
    call = black_greeks(k, s, expiry, is_call=True)
    put = black_greeks(k, s, expiry, is_call=False)
    assert call.delta - put.delta == pytest.approx(1.0, rel=2 * EPS)
    assert call.strike_delta - put.strike_delta == pytest.approx(-1.0, rel=2 * EPS)
    for name in ("gamma", "vega", "vanna", "volga", "decay"):
        assert getattr(call, name) == getattr(put, name)
    own = call if k >= 0.0 else put
    legs = float(own.delta), math.exp(k) * float(own.strike_delta)
    slack = 8 * EPS * (1.0 + place * place + 0.25 * s * s) * (abs(legs[0]) + abs(legs[1]))
    assert float(otm_value(k, s)) == pytest.approx(sum(legs), rel=0.0, abs=slack)
    assert call.decay == pytest.approx(-0.5 * s * s / expiry * call.gamma, rel=8 * EPS)
    assert call.vega == pytest.approx(call.gamma * s * math.sqrt(expiry), rel=8 * EPS)


def _textbook(forward, strike, vol, expiry, is_call):
    """Black's undiscounted formula with ``ln(F / K)``, in mpmath."""
    s = vol * mp.sqrt(expiry)
    d1 = mp.log(forward / strike) / s + s / 2
    sign = 1 if is_call else -1
    return sign * (forward * mp.ncdf(sign * d1) - strike * mp.ncdf(sign * (d1 - s)))


@settings(max_examples=60)
@given(
    vol=st.floats(0.02, 2.0),
    expiry=st.floats(0.003, 20.0),
    place=st.floats(-6.0, 6.0),
    is_call=st.booleans(),
)
def test_greeks_against_differentiation(vol, expiry, place, is_call):
    """30 digits of numerical differentiation (mpmath), relative to each Greek's own terms."""
    s = vol * math.sqrt(expiry)
    k = place * s
    found = black_greeks(k, s, expiry, is_call=is_call)
    with mp.workdps(80):
        tau = mp.mpf(expiry)
        sigma, strike = mp.mpf(s) / mp.sqrt(tau), mp.exp(mp.mpf(k))

        def value(forward=1, strike=strike, vol=sigma, expiry=tau):
            return _textbook(mp.mpf(forward), strike, vol, expiry, is_call)

        exact = {
            "delta": mp.diff(lambda f: value(forward=f), 1),
            "strike_delta": mp.diff(lambda x: value(strike=x), strike),
            "gamma": mp.diff(lambda f: value(forward=f), 1, 2),
            "vega": mp.diff(lambda v: value(vol=v), sigma),
            "vanna": mp.diff(lambda f, v: value(forward=f, vol=v), (1, sigma), (1, 1)),
            "volga": mp.diff(lambda v: value(vol=v), sigma, 2),
            "decay": -mp.diff(lambda t: value(expiry=t), tau),
        }
    rounding = 8.0 * EPS * (1.0 + place * place + s * s)
    # vanna and volga are differences of two terms: what each term carries
    terms = {
        "vanna": float(found.vega) * (abs(k) / s**2 + 0.5),
        "volga": float(found.vega) * math.sqrt(expiry) * (k * k / s**3 + 0.25 * s),
    }
    for name, reference in exact.items():
        scale = terms.get(name, abs(float(reference)))
        assert float(getattr(found, name)) == pytest.approx(float(reference), rel=0.0, abs=rounding * scale), name


def test_greeks_at_no_volatility():
    """The limits: a step in the money, a half and an infinite gamma at it, and no NaN."""
    found = black_greeks([-0.1, 0.0, 0.1], 0.0, 0.25, is_call=True)
    assert np.array_equal(found.delta, [1.0, 0.5, 0.0]) and np.array_equal(found.strike_delta, [-1.0, -0.5, 0.0])
    assert np.array_equal(found.gamma, [0.0, math.inf, 0.0])
    assert found.vega == pytest.approx([0.0, 0.5 / math.sqrt(2.0 * math.pi), 0.0])
    assert np.array_equal(found.volga, [0.0, 0.0, 0.0]) and np.array_equal(found.decay, [0.0, 0.0, 0.0])


def test_values_at_the_edges():
    """No deviation, no value; no end to it, the whole bound; what is not a number stays one."""
    assert np.array_equal(otm_value([0.0, 1.0, -1.0], 0.0), [0.0, 0.0, 0.0])
    assert np.array_equal(log_otm_value([0.0, 1.0, -1.0], 0.0), [-math.inf] * 3)
    assert otm_value([0.0, 1.0, -1.0], 1e3) == pytest.approx([1.0, 1.0, math.exp(-1.0)], rel=EPS)
    assert np.all(np.isnan(otm_value([math.nan, 0.0, 0.0], [0.2, math.nan, -1.0])))
    assert np.all(np.isnan(log_otm_value([math.nan, 0.0, 0.0], [0.2, math.nan, -1.0])))
    assert otm_value(0.1, np.full((2, 3), 0.2)).shape == (2, 3)
