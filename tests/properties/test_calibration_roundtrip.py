"""Surfaces of known parameters are fitted and the parameters come back; standard errors cover.

Source of truth: prices integrated in multiple precision by a separately written characteristic function
(``tests.reference.mp_surfaces``). The region of Heston's parameters is the one equity and index surfaces are
calibrated in (common practice, no source).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom, chi2

from engine.calibration import CalibrationSettings, calibrate
from tests.reference.mp_surfaces import heston_draw, jump_draw, surface

SEED = 20261201
TRUTH = {"v0": 0.04, "kappa": 1.5, "theta": 0.06, "sigma": 0.6, "rho": -0.6}
COVERED = ("v0", "theta", "rho")
NOISE = 0.002


def _fit(name, values, **kwargs):
    fit = calibrate(surface(name, values, **kwargs), CalibrationSettings(model=name))
    worst = max(abs(fit.parameters[key] / value - 1.0) for key, value in values.items())
    return fit, worst


@pytest.mark.parametrize("draw", range(4))
def test_heston_surface_gives_its_parameters_back(draw):
    """From the automatic start: 1e-8 in volatility, 1e-4 in every parameter."""
    fit, worst = _fit("heston", heston_draw(np.random.default_rng([SEED, draw])))
    assert fit.rmse_vol < 1e-8
    assert worst < 1e-4
    assert fit.status == "converged"
    assert fit.at_bound == []


def test_bates_surface_is_fitted():
    """1e-6 in volatility from the automatic start."""
    rng = np.random.default_rng([SEED, 1000])
    fit, _ = _fit("bates", {**heston_draw(rng), **jump_draw(rng)})
    assert fit.rmse_vol < 1e-6


@pytest.mark.parametrize(
    ("name", "values"),
    [
        ("merton", {"volatility": 0.17, "jump_intensity": 0.6, "jump_mean": -0.12, "jump_stdev": 0.1}),
        ("variance_gamma", {"sigma": 0.18, "theta": -0.15, "nu": 0.25}),
        ("black", {"volatility": 0.23}),
    ],
)
def test_other_models_come_back(name, values):
    """Models without a variance factor, by the same code."""
    fit, worst = _fit(name, values, expiries=(0.25, 0.6, 1.2))
    assert fit.rmse_vol < 1e-8
    assert worst < 1e-4
    assert fit.feller_ratio is None


def test_double_heston_fits_what_one_factor_made():
    """Two factors contain one: nothing can be left of the residuals but what an optimiser's slow end leaves."""
    fit = calibrate(
        surface("heston", TRUTH, expiries=(0.25, 1.2)), CalibrationSettings(model="double_heston", max_evaluations=60)
    )
    assert fit.rmse_vol < 1e-4


@pytest.mark.long
def test_hundred_heston_surfaces():
    """At least 98 of 100; the misses are printed."""
    missed = []
    for draw in range(100):
        values = heston_draw(np.random.default_rng([SEED, draw]))
        fit, worst = _fit("heston", values)
        if not (fit.rmse_vol < 1e-8 and worst < 1e-4):
            missed.append((draw, values, fit.rmse_vol, worst, fit.status))
    print(f"\nHeston: {100 - len(missed)} of 100", *missed, sep="\n")
    assert len(missed) <= 2


@pytest.mark.long
@pytest.mark.parametrize("block", range(4))
def test_hundred_bates_surfaces(block):
    """At least 23 of every 25, hence 92 of 100; the misses are printed."""
    missed = []
    for draw in range(25 * block, 25 * (block + 1)):
        rng = np.random.default_rng([SEED, 1000 + draw])
        values = {**heston_draw(rng), **jump_draw(rng)}
        fit, _ = _fit("bates", values)
        if not fit.rmse_vol < 1e-6:
            missed.append((draw, values, fit.rmse_vol, fit.status))
    print(f"\nBates, draws from {25 * block}: {25 - len(missed)} of 25", *missed, sep="\n")
    assert len(missed) <= 2


def _noisy_fits(draws, expiries, strikes, **settings):
    """Estimates and standard errors of Heston's parameters over independent normal errors in volatility."""
    clean = surface("heston", TRUTH, expiries=expiries, strikes=strikes)
    estimates, errors = [], []
    for draw in range(draws):
        rng = np.random.default_rng([SEED, 2000 + draw])
        noisy = [replace(one, vols=one.vols + NOISE * rng.standard_normal(one.vols.shape)) for one in clean]
        fit = calibrate(noisy, CalibrationSettings(**settings))
        estimates.append([fit.parameters[name] for name in TRUTH])
        errors.append([fit.standard_errors[name] for name in TRUTH])
    return np.array(estimates), np.array(errors)


def test_standard_errors_are_the_spread_of_the_estimates():
    """Over independent errors the estimates scatter as much as the standard errors say.

    ``sum (estimate - mean)^2 / error^2`` is nearly chi-squared; its one-in-ten-thousand points are the marks. And the
    truth within two errors no rarer than a binomial of 90 % would have it once in a thousand.
    """
    draws = 30
    estimates, errors = _noisy_fits(draws, (0.25, 1.2), 7)
    scatter = np.sum(((estimates - estimates.mean(axis=0)) / errors.mean(axis=0)) ** 2, axis=0)
    low, high = chi2.ppf([1e-4, 1.0 - 1e-4], draws - 1)
    for i, name in enumerate(TRUTH):
        if name in COVERED:
            assert low < scatter[i] < high, name
            inside = np.abs(estimates[:, i] - TRUTH[name]) <= 2.0 * errors[:, i]
            assert inside.sum() >= binom.ppf(1e-3, draws, 0.9), name


@pytest.mark.long
@pytest.mark.parametrize("settings", [{}, {"loss": "huber"}, {"residuals": "price", "weights": "vega"}])
def test_standard_errors_cover(settings):
    """Over 200 draws the truth lies within two standard errors in 90 to 99 % of cases."""
    estimates, errors = _noisy_fits(200, (0.1, 0.25, 0.5, 1.0, 2.0), 9, **settings)
    covered = np.mean(np.abs(estimates - np.array(list(TRUTH.values()))) <= 2.0 * errors, axis=0)
    print(settings, dict(zip(TRUTH, covered.tolist(), strict=True)))
    for name, share in zip(TRUTH, covered, strict=True):
        if name in COVERED:
            assert 0.90 <= share <= 0.99, name
