"""What a calibration answers: status, bounds, errors, doubts, quotes left out, progress; refusals by name.

Surfaces are made from multiple-precision prices (``tests.reference.mp_surfaces``).
"""

from __future__ import annotations

import pickle
from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from engine.calibration import CalibrationSettings, CalibrationSlice, Prior, calibrate
from engine.errors import EngineError, InputError
from tests.reference.mp_surfaces import surface

TRUTH = {"v0": 0.05, "kappa": 1.5, "theta": 0.06, "sigma": 0.7, "rho": -0.5}  # Feller ratio 0.37


@cache
def _clean():
    return surface("heston", TRUTH, expiries=(0.2, 0.7, 2.0), strikes=7)


def _noisy(size=0.002, seed=5):
    rng = np.random.default_rng(seed)
    return [replace(one, vols=one.vols + size * rng.standard_normal(one.vols.shape)) for one in _clean()]


def _says(fit, *words):
    return any(all(word in sentence for word in words) for sentence in fit.warnings)


def test_the_answer_in_full():
    """Columns in the order sent, residuals model less market, errors that follow from them."""
    slices = _noisy()
    fit = calibrate(slices, CalibrationSettings())
    assert fit.status == "converged"
    assert list(fit.parameters) == list(TRUTH)
    assert fit.correlation_order == tuple(TRUTH)
    assert fit.correlation == pytest.approx(fit.correlation.T)
    assert np.diag(fit.correlation) == pytest.approx(np.ones(5))
    assert np.linalg.eigvalsh(fit.correlation).min() > 0.0
    residuals = np.concatenate([one.residual_vols for one in fit.slices])
    for one, sent in zip(fit.slices, slices, strict=True):
        assert one.expiry == sent.expiry
        assert (one.strikes == sent.strikes).all()
        assert one.residual_vols == pytest.approx(one.model_vols - sent.vols, abs=1e-15)
    assert fit.rmse_vol == pytest.approx(np.sqrt(np.mean(residuals**2)), rel=1e-9)
    assert fit.max_abs_error_vol == pytest.approx(np.max(np.abs(residuals)), rel=1e-9)
    assert 0.001 < fit.rmse_vol < 0.003
    p = fit.parameters
    assert fit.feller_ratio == pytest.approx(2.0 * p["kappa"] * p["theta"] / p["sigma"] ** 2)
    assert fit.within_spread is None
    assert _says(fit, "Feller condition does not hold")
    assert pickle.loads(pickle.dumps(fit)).parameters == fit.parameters


def test_the_same_again():
    """A calibration is a function of its inputs, multi-start included."""
    settings = CalibrationSettings(starts=3, seed=9)
    one, two = calibrate(_noisy(), settings), calibrate(_noisy(), settings)
    assert one.parameters == two.parameters
    assert one.evaluations == two.evaluations


def test_a_bound_is_never_hidden():
    """The parameter sits on its bound exactly, and status, list, errors and words say so."""
    fit = calibrate(_clean(), CalibrationSettings(bounds={"kappa": (2.5, 10.0), "rho": (-0.3, 0.5)}))
    assert fit.status == "at_bound"
    assert fit.at_bound == ["kappa", "rho"]
    assert fit.parameters["kappa"] == pytest.approx(2.5, rel=1e-12)
    assert fit.parameters["rho"] == pytest.approx(-0.3, rel=1e-12)
    assert fit.standard_errors["kappa"] is None
    assert fit.correlation_order == ("v0", "theta", "sigma")
    assert _says(fit, "mean reversion (kappa)", "lower bound of 2.5")
    assert _says(fit, "the correlation (rho)", "lower bound of -0.3")


def test_a_bound_beside_the_truth_does_not_hold():
    """Bounds a hair outside the optimum: the fit is the free one."""
    fit = calibrate(_clean(), CalibrationSettings(bounds={"kappa": (1.499, 10.0), "rho": (-0.9, -0.4995)}))
    assert fit.status == "converged"
    assert fit.at_bound == []
    for name, value in TRUTH.items():
        assert fit.parameters[name] == pytest.approx(value, rel=1e-5), name


def test_feller_is_a_constraint_only_on_request():
    """The truth violates the condition: reported as it is, or held on the boundary at the price of a worse fit."""
    free, held = (calibrate(_clean(), CalibrationSettings(feller=how)) for how in ("report", "require"))
    assert free.feller_ratio == pytest.approx(2 * 1.5 * 0.06 / 0.49, rel=1e-4)
    assert 1.0 <= held.feller_ratio < 1.0 + 1e-9
    assert held.rmse_vol > 1e3 * free.rmse_vol
    assert held.status == "at_bound"
    assert _says(held, "Feller condition stops it")


def test_feller_that_does_not_bind_changes_nothing():
    """A surface within the condition is fitted alike."""
    slices = surface("heston", {**TRUTH, "sigma": 0.3}, expiries=(0.2, 2.0), strikes=5)
    fit = calibrate(slices, CalibrationSettings(feller="require"))
    assert fit.status == "converged"
    assert fit.parameters["sigma"] == pytest.approx(0.3, rel=1e-4)


def test_fixed_parameters_are_not_fitted():
    """At the true values the rest comes back; their standard errors are None."""
    fit = calibrate(_clean(), CalibrationSettings(fixed={"kappa": 1.5, "rho": -0.5}))
    assert fit.parameters["kappa"] == 1.5
    assert fit.parameters["sigma"] == pytest.approx(0.7, rel=1e-6)
    assert fit.standard_errors["kappa"] is None
    assert fit.rmse_vol < 1e-9


def test_prior_pulls_by_its_strength():
    """From no pull to a hard one the parameter moves to the prior, and the fit gets no better."""
    slices = _noisy()
    kappas, errors = [], []
    for strength in (0.0, 1e-3, 1e-1, 1e5):
        fit = calibrate(slices, CalibrationSettings(prior=Prior({"kappa": 3.0}, strength)))
        kappas.append(fit.parameters["kappa"])
        errors.append(fit.rmse_vol)
    assert kappas[0] < kappas[1] < kappas[2] < kappas[3] == pytest.approx(3.0, rel=1e-4)
    assert errors[0] < errors[1] < errors[2] < errors[3]
    assert kappas[0] == pytest.approx(calibrate(slices, CalibrationSettings()).parameters["kappa"], rel=1e-9)


@pytest.mark.parametrize("loss", ["soft_l1", "huber"])
def test_robust_losses_shrug_off_stale_quotes(loss):
    """Two of 21 quotes are eight vol points off; the truth is missed by far less than with squares."""
    slices = _noisy(0.0005)
    slices[0].vols[1] += 0.08
    slices[2].vols[5] -= 0.08
    square, robust = (calibrate(slices, CalibrationSettings(loss=name)) for name in ("linear", loss))
    for name in ("v0", "theta", "rho"):
        assert abs(robust.parameters[name] - TRUTH[name]) < 0.25 * abs(square.parameters[name] - TRUTH[name]), name


def test_quotes_left_out_are_told():
    """Unusable quotes keep their place, take no part, and are counted in words."""
    slices = _noisy()
    slices[1].vols[[0, 3]] = np.nan
    fit = calibrate(slices, CalibrationSettings())
    assert fit.slices[1].used.tolist() == [False, True, True, False, True, True, True]
    assert np.isnan(fit.slices[1].residual_vols[[0, 3]]).all()
    assert np.isfinite(fit.slices[1].model_vols).all()
    assert _says(fit, "2 of 21 quotes took no part")


def test_share_within_the_spread():
    """Counted over the quotes that have both sides: ten of them are wide enough, the rest are a hair too narrow."""
    slices = []
    for i, one in enumerate(_clean()):
        half = np.full(7, 1e-3)
        shift = np.where(np.arange(21)[7 * i : 7 * i + 7] < 10, 0.0, 2e-3)
        slices.append(replace(one, bid_vols=one.vols + shift - half, ask_vols=one.vols + shift + half))
    slices[2].bid_vols[6] = np.nan
    fit = calibrate(slices, CalibrationSettings())
    assert fit.within_spread == pytest.approx(10.0 / 20.0)


def test_what_is_not_identified_is_said():
    """One slice cannot tell mean reversion from the long-run variance; three quotes cannot carry five parameters."""
    fit = calibrate(_noisy()[1:2], CalibrationSettings(fixed={"sigma": 0.7}, max_evaluations=20))
    assert _says(fit, "one expiry only")
    few = CalibrationSlice(1.0, 100.0, 1.0, np.array([90.0, 100.0, 110.0]), np.array([0.22, 0.2, 0.19]))
    fit = calibrate([few], CalibrationSettings(max_evaluations=20))
    assert all(error is None for error in fit.standard_errors.values())
    assert fit.correlation.shape == (0, 0)
    assert _says(fit, "3 quotes for 5 parameters")


def test_standard_error_above_the_value_is_not_identified():
    """Where the variance stands at its long-run level, the speed of mean reversion is anyone's."""
    quiet = {"v0": 0.04, "kappa": 0.3, "theta": 0.04, "sigma": 0.3, "rho": -0.5}
    rng = np.random.default_rng(8)
    slices = [
        replace(one, vols=one.vols + 0.003 * rng.standard_normal(one.vols.shape))
        for one in surface("heston", quiet, expiries=(0.2, 0.5), strikes=7)
    ]
    fit = calibrate(slices, CalibrationSettings(fixed={"theta": 0.04, "sigma": 0.3}))
    assert fit.standard_errors["kappa"] > fit.parameters["kappa"]
    assert _says(fit, "mean reversion (kappa) is not identified by this surface: its standard error exceeds its value")


def test_evaluations_that_run_out_are_said():
    """``stopped``, in words too."""
    fit = calibrate(_noisy(), CalibrationSettings(max_evaluations=2))
    assert fit.status == "stopped"
    assert _says(fit, "did not converge within 2")


def test_cold_heston_fit_of_two_hundred_quotes():
    """Ten expiries of twenty strikes: at most 20 evaluations of the surface, from the automatic start."""
    from engine.models.heston import Heston
    from engine.slices import Slice
    from engine.smile import price_smiles

    expiries = (1 / 12, 1 / 6, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
    rng = np.random.default_rng(2)
    sent = []
    for tau in expiries:
        strikes = 100.0 * np.exp(np.linspace(-0.4, 0.3, 20) * np.sqrt(tau))
        one = Slice(tau, 100.0, 1.0, strikes, np.full(20, 2, dtype=np.uint8))
        vols = price_smiles(Heston(*TRUTH.values()), [one])[0].implied_vols
        sent.append(CalibrationSlice(tau, 100.0, 1.0, strikes, vols + 0.002 * rng.standard_normal(20)))
    fit = calibrate(sent, CalibrationSettings())
    assert fit.status == "converged"
    assert fit.evaluations <= 20


def test_progress_and_cancelling():
    """Called once a start and at the end; what it raises ends the calibration."""
    seen = []
    calibrate(_noisy(), CalibrationSettings(starts=3), progress=lambda done, total: seen.append((done, total)))
    assert seen == [(0, 3), (1, 3), (2, 3), (3, 3)]

    class Cancelled(Exception):
        pass

    def cancel(done, total):
        raise Cancelled

    with pytest.raises(Cancelled):
        calibrate(_noisy(), CalibrationSettings(), progress=cancel)


@pytest.mark.parametrize(
    ("settings", "argument"),
    [
        ({"model": "hesston"}, "model"),
        ({"residuals": "vols"}, "residuals"),
        ({"weights": "spread"}, "weights"),
        ({"loss": "cauchy"}, "loss"),
        ({"feller": "force"}, "feller"),
        ({"feller": "require", "model": "merton"}, "feller"),
        ({"starts": 0}, "starts"),
        ({"seed": -1}, "seed"),
        ({"max_evaluations": 0}, "max_evaluations"),
        ({"tolerance": 1.0}, "tolerance"),
        ({"prior": Prior({"kappa": 1.0}, -1.0)}, "prior.strength"),
        ({"prior": Prior({"kapa": 1.0}, 1.0)}, "prior.parameters.kapa"),
        ({"fixed": {"kappa": 1.0}, "bounds": {"kappa": (0.5, 2.0)}}, "fixed.kappa"),
        ({"prior": Prior({"kappa": 1.0}, float("nan"))}, "prior.strength"),
    ],
)
def test_settings_are_refused_by_name(settings, argument):
    """The fault names the setting and what is allowed."""
    with pytest.raises(InputError) as fault:
        calibrate(_clean(), CalibrationSettings(**settings))
    assert fault.value.argument == argument
    assert fault.value.allowed


@pytest.mark.parametrize(
    ("change", "argument", "index"),
    [
        ({"vols": np.full(7, np.nan)}, "slices.vols", ()),
        ({"vols": np.ones(3)}, "slices.vols", (0,)),
        ({"expiry": 0.0}, "slices.expiry", (0,)),
        ({"forward": -1.0}, "slices.forward", (0,)),
        ({"strikes": np.array([1.0, 2.0, -3.0, 4.0, 5.0, 6.0, 7.0])}, "slices.strikes", (0, 2)),
        ({"bid_vols": np.ones(6)}, "slices.bid_vols", (0,)),
    ],
)
def test_slices_are_refused_by_place(change, argument, index):
    """The fault names the column and the place."""
    with pytest.raises(InputError) as fault:
        calibrate([replace(_clean()[0], **change)], CalibrationSettings())
    assert (fault.value.argument, fault.value.index) == (argument, index)


@pytest.mark.parametrize("fixed", [{"kappa": 0.0}, {"theta": 0.0}, {"kappa": 0.0, "sigma": 0.3}])
def test_settings_that_leave_no_room(fixed):
    """Feller's condition with no mean reversion or no long-run variance admits nothing: refused, not a wrong answer."""
    with pytest.raises(EngineError):
        calibrate(_clean(), CalibrationSettings(feller="require", fixed=fixed))


def test_edges_of_the_models_can_be_fixed():
    """No mean reversion, no vol of vol: admissible models, fitted as they are."""
    for fixed in ({"kappa": 0.0}, {"sigma": 0.0}):
        fit = calibrate(_clean(), CalibrationSettings(fixed=fixed, max_evaluations=40))
        assert np.isfinite(fit.rmse_vol)
        assert fit.feller_ratio is None or fit.feller_ratio < 1e-9


def test_no_slices():
    """An empty surface is a fault of the call."""
    with pytest.raises(InputError):
        calibrate([], CalibrationSettings())
