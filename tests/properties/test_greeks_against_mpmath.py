"""Greeks and sensitivities of every model against differences of 30-digit prices: bounds that cover, 1e-8 of each.

The definitions are the service's own: delta and gamma with respect to the spot at fixed carry, theta = -dV/d(expiry) at
fixed rates, rho = dV/d(rate) at fixed spot and yield, sensitivities at fixed forward and discount factor, Black
quantities at the model's own implied volatility.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from functools import cache
from typing import Any

import gmpy2
import mpmath
import numpy as np
import pytest

from engine import GREEKS, MODELS, Payoff, Slice, Status, price_greeks
from tests.properties.parameter_sets import DIMENSIONS, expiry, pair
from tests.reference.mp_prices import otm_digitals, otm_value, otm_values

SETS = [0, pytest.param(1, marks=pytest.mark.long)]
LONG_SETS = range(100, 160)
DISTANCES = (-1.3, 0.6)
SPOT, RATE, YIELD = 100.0, 0.03, 0.01
DIGITS = 30
STEP = gmpy2.mpfr("1e-11")  # relative: the square of it is left, the digits it costs are there to lose
BLACK = ("vega", "vanna", "volga", "black_delta", "black_gamma")
PAYOFFS = (Payoff.CALL, Payoff.PUT, Payoff.DIGITAL_CALL, Payoff.DIGITAL_PUT)


def shifted(twin: Any, name: str, by: Any) -> Any:
    """The twin with one parameter moved; a dotted name reaches into a factor."""
    head, _, tail = name.partition(".")
    if isinstance(twin, tuple):
        return tuple(shifted(one, tail, by) if i == int(head) else one for i, one in enumerate(twin))
    old = getattr(twin, head)
    return dataclasses.replace(twin, **{head: shifted(old, tail, by) if tail else gmpy2.mpfr(old) + by})


class Quote:
    """One option in 30 digits: its value as a function of the spot, the expiry, the rate and the model."""

    def __init__(self, twin: Any, tau: float, strike: float, payoff: Payoff, forward: float, discount: float) -> None:
        self.twin, self.tau, self.strike, self.payoff = twin, gmpy2.mpfr(tau), gmpy2.mpfr(strike), payoff
        self.rate = -gmpy2.log(gmpy2.mpfr(discount)) / self.tau
        self.carry = gmpy2.log(gmpy2.mpfr(forward) / SPOT) / self.tau  # rate less yield

    def value(self, *, spot: Any = 0, tau: Any = 0, rate: Any = 0, twin: Any = None) -> Any:
        """At inputs moved by the amounts given."""
        t = self.tau + tau
        forward = (SPOT + spot) * gmpy2.exp((self.carry + rate) * t)
        discount = gmpy2.exp(-(self.rate + rate) * t)
        twin = twin or self.twin
        call = self.payoff in (Payoff.CALL, Payoff.DIGITAL_CALL)
        outside = call == (self.strike >= forward)
        if self.payoff in (Payoff.DIGITAL_CALL, Payoff.DIGITAL_PUT):
            probability = otm_digitals(twin, t, forward, [self.strike], digits=DIGITS)[0]
            return discount * (probability if outside else 1 - probability)
        otm = forward * otm_values(twin, t, forward, [self.strike], digits=DIGITS)[0]
        return discount * (otm if outside else otm + abs(forward - self.strike))


def _slope(price: Callable[[Any], Any], scale: float) -> Any:
    h = STEP * scale
    return (price(h) - price(-h)) / (2 * h)


def _second(price: Callable[[Any], Any], scale: float) -> Any:
    """The fourth-order formula, a wider step: it divides by its square."""
    h = gmpy2.mpfr("1e-6") * scale
    near, far = price(h) + price(-h), price(2 * h) + price(-2 * h)
    return (16 * near - far - 30 * price(0 * h)) / (12 * h * h)


def _exact(quote: Quote, model: Any, s: float) -> dict[str, Any]:
    """Every model Greek and sensitivity of one option."""
    local = SPOT * min(s, 1.0)  # the length over which the value changes
    names = type(model).sensitivity_names
    out = {
        "delta": _slope(lambda h: quote.value(spot=h), local),
        "gamma": _second(lambda h: quote.value(spot=h), local),
        "theta": -_slope(lambda h: quote.value(tau=h), float(quote.tau)),
        "rho": _slope(lambda h: quote.value(rate=h), 1.0),
    }
    for name in names:
        at = float(_reach(quote.twin, name))
        scale = min(abs(at), 1.0 - abs(at)) if name.endswith("rho") else abs(at)
        out[f"d/d{name}"] = _slope(lambda h, n=name: quote.value(twin=shifted(quote.twin, n, h)), scale or 1e-3)
    weights = model.variance_weights()
    if weights:
        out["minimum_variance_delta"] = out["delta"] + sum(
            gmpy2.mpfr(float(np.ravel(w)[0])) * out[f"d/d{names[i]}"] / SPOT for i, w in weights
        )
    return out


def _reach(twin: Any, name: str) -> Any:
    for part in name.split("."):
        twin = twin[int(part)] if isinstance(twin, tuple) else getattr(twin, part)
    return twin


def _case(name: str, seed: int) -> tuple[Any, Any, float, float]:
    """A model, its twin, an expiry and the scale of the density. Not at an edge of the box: differences need room."""
    rng = np.random.default_rng([seed, 13, len(name)])
    while True:
        u = [float(x) for x in rng.random(DIMENSIONS[name] + 1)]
        model, twin = pair(name, u[:-1])
        tau = expiry(u[-1], low=1.0 / 365.0, high=20.0)
        s = math.sqrt(float(np.reshape(model.mean_variance(tau), -1)[0]))
        inside = all(abs(float(_reach(twin, n))) > 0.0 for n in model.sensitivity_names)
        if 1e-3 < s < 3.0 and inside:
            return model, twin, tau, s


@cache
def _references(name: str, seed: int) -> list[tuple[Payoff, float, dict[str, Any]]]:
    model, twin, tau, s = _case(name, seed)
    out = []
    with gmpy2.context(gmpy2.get_context(), precision=160):
        for i, distance in enumerate(DISTANCES):
            payoff = PAYOFFS[(i + 2 * seed) % 4]
            strike = SPOT * math.exp(s * distance)
            quote = Quote(twin, tau, strike, payoff, *_market(tau))
            out.append((payoff, strike, _exact(quote, model, s)))
    return out


def _market(tau: float) -> tuple[float, float]:
    return SPOT * math.exp((RATE - YIELD) * tau), math.exp(-RATE * tau)


def check(name: str, seed: int, tolerance: float) -> tuple[float, float]:
    """Assert that every bound covers and every figure is good; the worst error over its bound, and over the scale."""
    model, _, tau, s = _case(name, seed)
    rows = _references(name, seed)
    forward, discount = _market(tau)
    payoffs = np.array([payoff for payoff, _, _ in rows], dtype=np.uint8)
    one = Slice(tau, forward, discount, np.array([strike for _, strike, _ in rows]), payoffs, spot=SPOT)
    wanted = [g for g in GREEKS if g not in BLACK and (g != "minimum_variance_delta" or model.variance_weights())]
    found = price_greeks(model, [one], greeks=wanted, sensitivities=True, tolerance=tolerance)[0]
    worst_ratio = worst_share = 0.0
    for i, (_, _, exact) in enumerate(rows):
        for which, true in exact.items():
            parameter = which.removeprefix("d/d")
            value = found.sensitivities[parameter] if parameter != which else found.greeks[which]
            bound = found.sensitivity_bounds[parameter] if parameter != which else found.greek_bounds[which]
            error = float(abs(gmpy2.mpfr(float(value[i])) - true))
            digits = 1e-18 * abs(float(true))  # the difference formula's own
            assert error <= bound[i] + digits, (which, i, model, tau, float(value[i]), float(true), bound[i])
            share = error / _scale(which, model, tau, s, abs(float(true)), float(found.priced.prices[i]))
            assert share <= 1e-8, (which, i, model, tau, float(value[i]), float(true), bound[i])
            worst_ratio, worst_share = max(worst_ratio, error / bound[i]), max(worst_share, share)
    return worst_ratio, worst_share


def _scale(which: str, model: Any, tau: float, s: float, true: float, price: float) -> float:
    """What 1e-8 is of: the figure, or where it crosses zero the change it makes to the price over a natural unit."""
    unit = {"delta": SPOT * s, "minimum_variance_delta": SPOT * s, "gamma": (SPOT * s) ** 2, "theta": tau, "rho": 1.0}
    if which.startswith("d/d"):
        size = abs(float(_reach(model, which.removeprefix("d/d"))))
        return max(true, 1e-3 * price / max(size, 1e-3))
    return max(true, 1e-3 * price / unit[which])


@pytest.mark.parametrize("name", list(MODELS))
@pytest.mark.parametrize("seed", SETS)
def test_greeks_and_sensitivities(name: str, seed: int) -> None:
    check(name, seed, 1e-10)


@pytest.mark.long
@pytest.mark.parametrize("name", list(MODELS))
def test_greeks_and_sensitivities_at_length(name: str) -> None:
    worst = np.max([check(name, seed, 1e-10) for seed in LONG_SETS], axis=0)
    print(f"{name}: worst Greek error / stated bound {worst[0]:.3g}, worst share {worst[1]:.3g}")


@pytest.mark.parametrize("payoff", [Payoff.CALL, Payoff.PUT, Payoff.DIGITAL_CALL, Payoff.DIGITAL_PUT])
def test_black_quantities_at_the_implied_volatility(payoff: Payoff) -> None:
    """Black's own Greeks by mpmath differences of his formula at the volatility implied from the reference price."""
    model, twin, tau, s = _case("heston", 2)
    forward, discount = _market(tau)
    strikes = SPOT * np.exp(s * np.array([-2.0, -0.5, 0.3, 1.5]))
    one = Slice(tau, forward, discount, strikes, np.full(4, payoff, dtype=np.uint8), spot=SPOT)
    found = price_greeks(model, [one], greeks=list(BLACK), tolerance=1e-12)[0]
    assert np.all(found.priced.statuses == Status.OK)
    for i, strike in enumerate(strikes):
        exact = _black_quantities(twin, tau, float(strike), payoff, forward, discount)
        for which, true in exact.items():
            error = float(abs(mpmath.mpf(float(found.greeks[which][i])) - true))
            assert error <= found.greek_bounds[which][i], (which, strike, float(true), error)
            assert error <= 1e-8 * max(abs(float(true)), 1e-3), (which, strike, float(true), error)


def _black_quantities(
    twin: Any, tau: float, strike: float, payoff: Payoff, forward: float, discount: float
) -> dict[str, Any]:
    with mpmath.workdps(40):
        f, d, k, t = (mpmath.mpf(x) for x in (forward, discount, strike, tau))
        growth = f / SPOT
        with gmpy2.context(gmpy2.get_context(), precision=160):
            log_strike = gmpy2.log(gmpy2.mpfr(strike) / gmpy2.mpfr(forward))
            otm = f * mpmath.mpf(str(otm_value(twin, tau, log_strike, digits=30)))
        call = strike >= forward

        def vanilla(vol: Any, call: bool, at: Any) -> Any:
            deviation = vol * mpmath.sqrt(t)
            d1 = mpmath.log(at / k) / deviation + deviation / 2
            sign = 1 if call else -1
            return sign * (at * mpmath.ncdf(sign * d1) - k * mpmath.ncdf(sign * (d1 - deviation)))

        bracket = (mpmath.mpf("0.01"), mpmath.mpf(3))
        vol = mpmath.findroot(
            lambda v: mpmath.log(vanilla(v, call, f) / otm), bracket, solver="ridder", tol=1e-60, maxsteps=300
        )

        def price(spot: Any, v: Any) -> Any:
            at = spot * growth
            if payoff in (Payoff.CALL, Payoff.PUT):
                return d * vanilla(v, payoff == Payoff.CALL, at)
            deviation = v * mpmath.sqrt(t)
            d2 = mpmath.log(at / k) / deviation - deviation / 2
            return d * mpmath.ncdf(d2 if payoff == Payoff.DIGITAL_CALL else -d2)

        spot = mpmath.mpf(SPOT)
        orders = {"vega": (0, 1), "vanna": (1, 1), "volga": (0, 2), "black_delta": (1, 0), "black_gamma": (2, 0)}
        return {name: mpmath.diff(price, (spot, vol), order) for name, order in orders.items()}
