"""Heston against published and independently recomputed numbers; each source and how its digits were had is named.

Marks: *seen* = digits read in the published page; *recomputed* = 40-digit arithmetic, independent of this project's
code; *from memory* = remembered from the source, not seen.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from engine.greeks import price_greeks
from engine.models.heston import Heston
from engine.slices import Slice
from engine.smile import PricedSlice, price_smiles
from engine.status import Payoff, Status

# A. Lewis, "Heston Model Reference Prices", 15 Feb 2019, published online: S = 100, T = 1, r = 0.01, q = 0.02 (prices
# seen and recomputed, implied volatilities recomputed). His theta is kappa here, his omega is kappa theta.
LEWIS = Heston(v0=0.04, kappa=4.0, theta=0.25, sigma=1.0, rho=-0.5)
LEWIS_FORWARD, LEWIS_DISCOUNT = 100.0 * math.exp(0.01 - 0.02), math.exp(-0.01)
LEWIS_STRIKES = np.array([80.0, 90.0, 100.0, 110.0, 120.0])
LEWIS_CALLS = np.array(
    [
        26.774758743998854221382195325726949201687,
        20.933349000596710388139445766564068085476,
        16.070154917028834278213466703938231827658,
        12.132211516709844867860534767549426052805,
        9.024913483457835636553375454092357136489,
    ]
)
LEWIS_PUTS = np.array(
    [
        7.958878113256768285213263077598987193482,
        12.017966707346304987709573290236471654992,
        17.055270961270109413522653999411000974895,
        23.017825898442800538908781834822560777763,
        29.811026202682471843340682293165857439167,
    ]
)
LEWIS_VOLS = np.array(
    [0.446473997010266793, 0.434630124927447276, 0.424485181757110861, 0.415806150733152236, 0.40840587883232172]
)

# F. Fang and C. W. Oosterlee, "A novel pricing method for European options based on Fourier-cosine series expansions",
# SIAM J. Sci. Comput. 31(2), 2008: S = K = 100, r = q = 0.
FANG = Heston(v0=0.0175, kappa=1.5768, theta=0.0398, sigma=0.5751, rho=-0.5711)
FANG_ROWS = {  # expiry: (printed, from memory; recomputed; implied volatility, recomputed)
    1.0: (5.785155450, 5.78515543437618903, 0.145139634649723048),
    10.0: (22.318945791474590, 22.3189457911544892, 0.179287148168444058),
}


def _lewis(payoff: Payoff, tolerance: float) -> PricedSlice:
    payoffs = np.full(LEWIS_STRIKES.shape, payoff, dtype=np.uint8)
    one = Slice(1.0, LEWIS_FORWARD, LEWIS_DISCOUNT, LEWIS_STRIKES, payoffs)
    return price_smiles(LEWIS, [one], tolerance=tolerance)[0]


@pytest.mark.parametrize("tolerance", [1e-6, 1e-8, 1e-10, 1e-12, 1e-13])
@pytest.mark.parametrize(("payoff", "published"), [(Payoff.CALL, LEWIS_CALLS), (Payoff.PUT, LEWIS_PUTS)])
def test_lewis_2019_bounds_cover_the_difference(payoff: Payoff, published: np.ndarray, tolerance: float) -> None:
    found = _lewis(payoff, tolerance)
    assert np.all(np.abs(found.prices - published) <= found.error_bounds)
    assert np.all(found.error_bounds <= 3.0 * tolerance * published + 1e-12)


@pytest.mark.parametrize(("payoff", "published"), [(Payoff.CALL, LEWIS_CALLS), (Payoff.PUT, LEWIS_PUTS)])
def test_lewis_2019_prices_to_twelve_digits(payoff: Payoff, published: np.ndarray) -> None:
    for tolerance in (1e-10, 1e-12):
        found = _lewis(payoff, tolerance)
        assert np.all(np.abs(found.prices - published) <= 1e-12 * published)
        assert np.all(found.statuses == Status.OK)


@pytest.mark.parametrize("payoff", [Payoff.CALL, Payoff.PUT])
def test_lewis_2019_implied_vols(payoff: Payoff) -> None:
    assert np.all(np.abs(_lewis(payoff, 1e-12).implied_vols - LEWIS_VOLS) <= 1e-13)


@pytest.mark.parametrize("expiry", sorted(FANG_ROWS))
@pytest.mark.parametrize("payoff", [Payoff.CALL, Payoff.PUT])
def test_fang_oosterlee_2008(expiry: float, payoff: Payoff) -> None:
    printed, recomputed, vol = FANG_ROWS[expiry]
    one = Slice(expiry, 100.0, 1.0, np.array([100.0]), np.array([payoff], dtype=np.uint8))
    found = price_smiles(FANG, [one], tolerance=1e-12)[0]  # at K = F with no rates the put is worth the call
    assert abs(found.prices[0] - recomputed) <= found.error_bounds[0] <= 1e-10
    assert abs(found.prices[0] - recomputed) <= 1e-12 * recomputed
    # The printed digits are off by 1.6e-8 (one year) and 3.2e-10 (ten years) against 40-digit arithmetic.
    assert abs(found.prices[0] - printed) <= 1e-7
    assert abs(found.implied_vols[0] - vol) <= 1e-13


# Greeks of both sets at K = 100, recomputed in 40-digit arithmetic to the digits given: delta, gamma, rho (dC/dr)
# with respect to the spot at fixed yield, dC/dT at fixed rates (theta is minus it).
GREEKS = [
    (
        LEWIS,
        Slice(1.0, LEWIS_FORWARD, LEWIS_DISCOUNT, np.array([100.0]), np.array([0], dtype=np.uint8), spot=100.0),
        {
            "delta": "0.599471325750028131",
            "gamma": "0.00928753738",
            "rho": "43.876977657974",
            "theta": "-9.43327631833392",
        },
        {
            "v0": "10.1792654044795",
            "kappa": "0.689854176691162",
            "theta": "32.5601334741097",
            "sigma": "-1.11317149821701",
            "rho": "0.949832739479237",
        },
    ),
    (
        FANG,
        Slice(1.0, 100.0, 1.0, np.array([100.0]), np.array([0], dtype=np.uint8), spot=100.0),
        {
            "delta": "0.624916495626253",
            "gamma": "0.0305533418164",
            "rho": "56.7064941282491",
            "theta": "-3.56076182472477",
        },
        {
            "v0": "54.5653308932142",
            "kappa": "0.86874027056887",
            "theta": "62.9151829186584",
            "sigma": "-2.20480856321",
            "rho": "0.580572611416794",
        },
    ),
]


@pytest.mark.parametrize(("model", "one", "greeks", "sensitivities"), GREEKS)
def test_greeks_and_sensitivities(
    model: Heston, one: Slice, greeks: dict[str, str], sensitivities: dict[str, str]
) -> None:
    found = price_greeks(model, [one], greeks=list(greeks), sensitivities=True, tolerance=1e-12)[0]
    assert found.with_respect_to == "spot"
    for table, values, bounds in (
        (greeks, found.greeks, found.greek_bounds),
        (sensitivities, found.sensitivities, found.sensitivity_bounds),
    ):
        for name, digits in table.items():
            unit = 10.0 ** -len(digits.split(".")[1])  # of the last digit given
            rounded_inputs = 4e-16 * 100.0 * (1.0 + abs(float(digits)))
            error = abs(values[name][0] - float(digits))
            assert error <= bounds[name][0] + unit + rounded_inputs, name
            assert bounds[name][0] <= 1e-9 * max(1.0, abs(float(digits))), name


# Critical moments w+ and w-: where the explosion time of Andersen and Piterbarg (2007, Finance Stoch. 11) equals the
# expiry (formula from memory; recomputed, and agreeing with the Riccati integral to 28 digits). "Andersen I": L.
# Andersen, "Simple and efficient simulation of the Heston stochastic volatility model", J. Comput. Finance 11(3),
# 2008, test case I (parameters from memory).
ANDERSEN = Heston(v0=0.04, kappa=0.5, theta=0.04, sigma=1.0, rho=-0.9)
CRITICAL_MOMENTS = [
    (FANG, 0.1, 97.1131826653312, -41.5698945227341),
    (FANG, 1.0, 14.5011656270019, -4.93652067783884),
    (FANG, 10.0, 7.77395343854857, -1.60703229873493),
    (LEWIS, 1.0, 11.690542319503, -4.03744473219485),
    (ANDERSEN, 10.0, 10.3208395066669, -0.22567757921623),
]


@pytest.mark.parametrize(("model", "tau", "upper", "lower"), CRITICAL_MOMENTS)
def test_critical_moments(model: Heston, tau: float, upper: float, lower: float) -> None:
    edges = model.strip(tau, precise=True)
    low, high = (float(np.reshape(edge, -1)[0]) for edge in edges)
    assert abs(high - upper) <= 2e-13 * upper
    assert abs(low - lower) <= 2e-13 * (1.0 - lower)
    inner_low, inner_high = (float(np.reshape(edge, -1)[0]) for edge in model.strip(tau))  # coarser, from inside
    assert high - 2e-3 * (high - 1.0) <= inner_high <= high
    assert low <= inner_low <= low * (1.0 - 2e-3)


def test_second_moment_of_a_positively_correlated_set_explodes() -> None:
    """rho = +0.5, kappa = 0.5, sigma = 1: E[S^2] is infinite from T* = 1.828485085 on (recomputed)."""
    model = Heston(v0=0.04, kappa=0.5, theta=0.04, sigma=1.0, rho=0.5)
    for tau, exists in ((1.828485084, True), (1.828485086, False)):
        upper = model.strip(tau, precise=True)[1]
        assert (float(np.reshape(upper, -1)[0]) > 2.0) is exists


@pytest.mark.parametrize("model", [FANG, ANDERSEN])
def test_second_moment_of_these_sets_never_explodes(model: Heston) -> None:
    assert float(np.reshape(model.strip(50.0)[1], -1)[0]) > 2.0
