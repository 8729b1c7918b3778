"""Variance Gamma against published sets, recomputed in 40-digit arithmetic by two routes; each source is named."""

from __future__ import annotations

import math

import numpy as np
import pytest

from engine import MODELS, Payoff, Slice, Status, price_smiles

# F. Fang and C. W. Oosterlee, SIAM J. Sci. Comput. 31(2), 2008: S = 100, K = 90, r = 0.1 (digits from memory agree
# with the recomputed ones used here). At T = 0.1 the characteristic function falls only like 1/|u|.
FANG = {"sigma": 0.12, "theta": -0.14, "nu": 0.2}
FANG_CALLS = {0.1: 10.9937031867290561, 1.0: 19.0993547242020929}

# P. Carr and D. Madan, "Option valuation using the fast Fourier transform", J. Comput. Finance 2(4), 1999: S = 100, r
# = 0.05, q = 0.03, puts (parameters and printed values from memory, values recomputed to the digits given here).
CARR_MADAN = {
    (0.12, 0.16, -0.33, 1.0): (0.622071850372, 0.702223051979, 0.790658901093),
    (0.25, 2.0, -0.10, 1.0): (2.297617952810, 2.429624852883, 2.567794916289),
    (0.12, 0.16, -0.33, 0.25): (0.083150875577, 0.099940021748, 0.119789538276),
    (0.25, 2.0, -0.10, 0.25): (0.635626345842, 0.678695995299, 0.724426653823),
}
CARR_MADAN_PRINTED = (0.6356, 0.6787, 0.7244)  # the last row, as in the paper (from memory)


def _put_slice(tau: float, rate: float, dividend: float, strikes: list[float], payoff: Payoff) -> Slice:
    forward = 100.0 * math.exp((rate - dividend) * tau)
    payoffs = np.full(len(strikes), payoff, dtype=np.uint8)
    return Slice(tau, forward, math.exp(-rate * tau), np.array(strikes), payoffs)


@pytest.mark.parametrize("tau", sorted(FANG_CALLS))
@pytest.mark.parametrize("tolerance", [1e-6, 1e-10, 1e-12])
def test_fang_oosterlee_2008(tau: float, tolerance: float) -> None:
    one = _put_slice(tau, 0.1, 0.0, [90.0], Payoff.CALL)
    found = price_smiles(MODELS["variance_gamma"](**FANG), [one], tolerance=tolerance)[0]
    recomputed = FANG_CALLS[tau]
    inputs = 4e-16 * 200.0  # the forward and the discount factor are rounded doubles
    assert abs(found.prices[0] - recomputed) <= found.error_bounds[0] + inputs
    if tolerance <= 1e-10:
        assert abs(found.prices[0] - recomputed) <= 1e-12 * recomputed
        assert found.statuses[0] == Status.OK


@pytest.mark.parametrize("case", list(CARR_MADAN))
def test_carr_madan_1999(case: tuple[float, float, float, float]) -> None:
    sigma, nu, theta, tau = case
    model = MODELS["variance_gamma"](sigma=sigma, theta=theta, nu=nu)
    one = _put_slice(tau, 0.05, 0.03, [77.0, 78.0, 79.0], Payoff.PUT)
    found = price_smiles(model, [one])[0]
    digits = 5.1e-13  # half a unit of the last digit given
    assert np.all(np.abs(found.prices - CARR_MADAN[case]) <= found.error_bounds + digits)
    assert np.all(found.error_bounds <= 1e-9)
    if case == (0.25, 2.0, -0.10, 0.25):
        assert np.all(np.abs(found.prices - CARR_MADAN_PRINTED) <= 5e-5)


# Damping strip of the same sets: u for which E[S^u] is finite (recomputed, to the digits given).
@pytest.mark.parametrize(
    ("case", "low", "high"),
    [((0.12, 0.16, -0.33), -14.41, 60.24), ((0.25, 2.0, -0.10), -2.708, 5.908)],
)
def test_strip(case: tuple[float, float, float], low: float, high: float) -> None:
    sigma, nu, theta = case
    for tau in (0.25, 1.0):
        edges = MODELS["variance_gamma"](sigma=sigma, theta=theta, nu=nu).strip(tau)
        found = [float(np.reshape(edge, -1)[0]) for edge in edges]
        digits = 5.1e-4 if high < 10.0 else 5.1e-3
        assert abs(found[0] - low) <= digits
        assert abs(found[1] - high) <= digits
