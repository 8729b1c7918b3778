"""Black's formula against printed examples: prices, Greeks, and the inversion targets.

Each row has its source and how far it was verified: SEEN-2, read as somebody's quotation of the source; MEM, the
printed digits are from memory (none are given where none are remembered). The longer digits beside them were recomputed
in 40-digit arithmetic apart from the engine.
"""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest

from engine.black import black_greeks, implied_vols, otm_value, total_deviation
from engine.moneyness import log_moneyness
from engine.status import Payoff, Status

EPS = float(np.finfo(np.float64).eps)

# name, spot or forward, strike, expiry, rate, cost of carry, volatility, payoff, printed, decimals, recomputed
PRICES = [
    ("Hull 5th ed. ex. 12.7, call (SEEN-2)", 42, 40, 0.5, 0.10, 0.10, 0.20, "call", 4.76, 2, 4.75942239287153),
    ("Hull 5th ed. ex. 12.7, put (SEEN-2)", 42, 40, 0.5, 0.10, 0.10, 0.20, "put", 0.81, 2, 0.808599372900094),
    ("Hull, index (MEM)", 930, 900, 2 / 12, 0.08, 0.05, 0.20, "call", 51.83, 2, 51.8329567964908),
    ("Hull, futures put (MEM)", 20, 20, 4 / 12, 0.09, 0.0, 0.25, "put", 1.12, 2, 1.11664145655894),
    ("Hull, Greeks' example (MEM)", 49, 50, 0.3846, 0.05, 0.05, 0.20, "call", 2.40, 2, 2.40046108696566),
    ("Haug, generic (MEM)", 60, 65, 0.25, 0.08, 0.08, 0.30, "call", 2.1334, 4, 2.1333684449162),
    ("Haug, put with yield (MEM)", 100, 95, 0.5, 0.10, 0.05, 0.20, "put", 2.4648, 4, 2.46478764675582),
    ("Haug, futures call (MEM)", 19, 19, 0.75, 0.10, 0.0, 0.28, "call", 1.7011, 4, 1.70105072523627),
    ("Haug, futures put (MEM)", 19, 19, 0.75, 0.10, 0.0, 0.28, "put", 1.7011, 4, 1.70105072523627),
    ("Haug, currency (MEM)", 1.56, 1.60, 0.5, 0.06, -0.02, 0.12, "call", 0.0291, 4, 0.0290992531494397),
    ("Fang and Oosterlee 2008, K=80 (MEM)", 100, 80, 0.1, 0.1, 0.1, 0.25, "call", None, 0, 20.7992263086733),
    ("Fang and Oosterlee 2008, K=100 (MEM)", 100, 100, 0.1, 0.1, 0.1, 0.25, "call", None, 0, 3.65996845332545),
    ("Fang and Oosterlee 2008, K=120 (MEM)", 100, 120, 0.1, 0.1, 0.1, 0.25, "call", None, 0, 0.044577814073289),
]

# 1.9: undiscounted, forward 1, out-of-the-money call; recomputed
DEVIATIONS = (0.1, 1.0, 8.0)
TARGETS = {
    1.0: (0.0398776116767449232, 0.382924922548026207, 0.99993665751633376),
    1.00000001: (0.0398776068761331808, 0.382924919462650838, 0.999936657516017048),
    1.1: (0.0095394739185722735, 0.353747353168635834, 0.999933570097266947),
    2.0: (4.08296663158787041e-14, 0.1906101152367584, 0.999910723116654291),
    20.0: (2.62756761829766689e-199, 0.00155724371234888163, 0.999734087430981982),
}
SMALL = {1.0: 3.98942263778838e-4, 1.00000001: 3.98937265793496715e-4}  # at s = 0.001


def _market(spot, expiry, rate, carry):
    return spot * math.exp(carry * expiry), math.exp(-rate * expiry)


def _price(spot, strike, expiry, rate, carry, vol, payoff):
    forward, discount = _market(spot, expiry, rate, carry)
    k = log_moneyness(np.array([float(strike)]), forward)
    out_of_money = float(otm_value(k, vol * math.sqrt(expiry))[0]) * forward
    intrinsic = max(forward - strike, 0.0) if payoff == "call" else max(strike - forward, 0.0)
    return discount * (out_of_money + intrinsic)


def _greeks(spot, strike, expiry, rate, carry, vol, is_call):
    forward, discount = _market(spot, expiry, rate, carry)
    found = black_greeks(math.log(strike / forward), vol * math.sqrt(expiry), expiry, is_call=is_call)
    return found, forward, discount


@pytest.mark.parametrize("row", PRICES, ids=[row[0] for row in PRICES])
def test_printed_prices(row):
    """To the digits printed, and to 1e-14 of spot against the recomputed ones (15 digits are given)."""
    _, spot, strike, expiry, rate, carry, vol, payoff, printed, decimals, recomputed = row
    found = _price(spot, strike, expiry, rate, carry, vol, payoff)
    assert printed is None or round(found, decimals) == printed
    assert found == pytest.approx(recomputed, rel=1e-14, abs=1e-15 * spot)


@pytest.mark.parametrize("row", PRICES, ids=[row[0] for row in PRICES])
def test_volatility_comes_back_from_printed_examples(row):
    """The recomputed price, 15 digits of it, gives the example's volatility back to what those digits determine."""
    _, spot, strike, expiry, rate, carry, vol, payoff, _, _, recomputed = row
    forward, discount = _market(spot, expiry, rate, carry)
    found = implied_vols(
        [recomputed],
        strikes=[strike],
        forward=forward,
        discount_factor=discount,
        expiry=expiry,
        payoffs=Payoff.CALL if payoff == "call" else Payoff.PUT,
    )
    greeks, _, _ = _greeks(spot, strike, expiry, rate, carry, vol, True)
    slack = (1e-14 * recomputed + 1e-15 * spot) / (discount * forward * float(greeks.vega))
    assert found.statuses[0] == Status.OK
    assert found.vols[0] == pytest.approx(vol, abs=slack + 4 * EPS)


def test_hull_greeks():
    """Hull (MEM): S=49 K=50 r=5% vol=20% T=.3846: delta .522, gamma .066, vega 12.1, theta -4.31, rho 8.91."""
    spot, strike, expiry, rate, vol = 49.0, 50.0, 0.3846, 0.05, 0.2
    g, forward, discount = _greeks(spot, strike, expiry, rate, rate, vol, True)
    price = _price(spot, strike, expiry, rate, rate, vol, "call")
    found = {
        "delta": g.delta,
        "gamma": g.gamma / spot,
        "vega": discount * forward * g.vega,
        # -dV/d(expiry) at fixed spot and rate: V = D F v, F and D move with the expiry, D F does not
        "theta": discount * forward * g.decay + rate * price - rate * spot * g.delta,
        "rho": -expiry * strike * discount * g.strike_delta,
    }
    printed = {"delta": 0.522, "gamma": 0.066, "vega": 12.1, "theta": -4.31, "rho": 8.91}
    decimals = {"delta": 3, "gamma": 3, "vega": 1, "theta": 2, "rho": 2}
    recomputed = {
        "delta": 0.521601633971576,
        "gamma": 0.0655453772524785,
        "vega": 12.1052427542438,
        "theta": -4.3053899645461,
        "rho": 8.90657409880095,
    }
    for name, value in found.items():
        assert round(float(value), decimals[name]) == printed[name]
        assert float(value) == pytest.approx(recomputed[name], rel=2e-14)


def test_haug_greeks():
    """Haug (MEM): delta of futures options, gamma and vega, theta of a put per year and per day, rho."""
    g, _, discount = _greeks(105.0, 100.0, 0.5, 0.10, 0.0, 0.36, True)
    assert float(discount * g.delta) == pytest.approx(0.594628659729996, rel=2e-14)
    g, _, discount = _greeks(105.0, 100.0, 0.5, 0.10, 0.0, 0.36, False)
    assert float(discount * g.delta) == pytest.approx(-0.356600764770718, rel=2e-14)

    g, forward, discount = _greeks(55.0, 60.0, 0.75, 0.10, 0.10, 0.30, True)
    assert float(g.gamma / 55.0) == pytest.approx(0.0278211604769408, rel=2e-14)
    assert float(discount * forward * g.vega) == pytest.approx(18.9357773496179, rel=2e-14)

    spot, strike, expiry, rate, carry, vol = 430.0, 405.0, 0.0833, 0.07, 0.02, 0.20
    g, forward, discount = _greeks(spot, strike, expiry, rate, carry, vol, False)
    price = _price(spot, strike, expiry, rate, carry, vol, "put")
    theta = float(discount * forward * (g.decay - carry * g.delta) + rate * price)
    assert theta == pytest.approx(-31.1923670565190, rel=2e-14)
    assert round(theta / 365.0, 4) == -0.0855

    g, _, discount = _greeks(72.0, 75.0, 1.0, 0.09, 0.09, 0.19, True)
    assert float(-1.0 * 75.0 * discount * g.strike_delta) == pytest.approx(38.7325050173291, rel=2e-14)


@pytest.mark.parametrize("strike", TARGETS)
def test_targets_forward_and_back(strike):
    """Values to 4 rounding units times the condition number, total deviations to 16."""
    k = log_moneyness(np.array([strike]), 1.0)
    for s, value in zip(DEVIATIONS, TARGETS[strike], strict=True):
        vega = math.exp(-0.5 * (k[0] / s - 0.5 * s) ** 2) / math.sqrt(2.0 * math.pi)
        elasticity = s * vega / value
        assert otm_value(k, s)[0] == pytest.approx(
            value, rel=4 * EPS * (1.0 + 3.0 * elasticity)
        )  # 3: s and k both move it
        found = total_deviation(k, np.array([value]))
        assert found.statuses[0] == Status.OK
        assert found.deviations[0] == pytest.approx(s, rel=16 * EPS * max(1.0, 1.0 / elasticity))


@pytest.mark.parametrize("strike", SMALL)
def test_small_targets(strike):
    """s = 0.001 near the money; 15 digits are given for the first."""
    k = log_moneyness(np.array([strike]), 1.0)
    assert otm_value(k, 0.001)[0] == pytest.approx(SMALL[strike], rel=2e-15)
    assert total_deviation(k, np.array([SMALL[strike]])).deviations[0] == pytest.approx(0.001, rel=16 * EPS)


def test_target_below_the_double_range():
    """s = 0.001, K = 1.1: the value is 1.2e-1980; a zero and a status, not a crash and not a number."""
    k = math.log(1.1)
    assert otm_value(k, 0.001) == 0.0
    found = total_deviation(np.array([k]), otm_value([k], 0.001))
    assert math.isnan(found.deviations[0]) and found.statuses[0] == Status.ZERO_TIME_VALUE


@pytest.mark.parametrize(
    "value", [1e-300, 1e-12, 3.98942263778838e-4, 0.04, 0.25, 0.3829, 0.5, 0.9, 0.99999, 1.0 - 1e-12]
)
def test_exact_inverse_at_the_money(value):
    """K = F: s = 2 invPhi((1 + c / F) / 2) (identity from Jaeckel, "By Implication"; invPhi by mpmath, 50 digits)."""
    found = total_deviation(np.zeros(1), np.array([value])).deviations[0]
    with mp.workdps(350):  # (1 + c) / 2 must keep the digits of c = 1e-300
        exact = 2 * mp.sqrt(2) * mp.erfinv(mp.mpf(value))
    condition = max(1.0, value / (float(exact) * float(mp.npdf(exact / 2))))
    assert found == pytest.approx(float(exact), rel=16 * EPS * condition)
