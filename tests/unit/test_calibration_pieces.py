"""Calibration's pieces by themselves: coordinates, weights, losses, Jacobian."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import least_squares

from engine.black import implied_vols, otm_value
from engine.calibration import CalibrationSettings, CalibrationSlice, Prior
from engine.calibration.coordinates import coordinates_of, feller_ratio, model_from
from engine.calibration.losses import Loss
from engine.calibration.objective import Objective
from engine.calibration.starts import automatic_starts, shape_of
from engine.calibration.weights import lay_out
from engine.errors import InputError
from engine.models.bates import Bates
from engine.models.double_heston import DoubleHeston
from engine.models.heston import Heston
from engine.models.variance_gamma import VarianceGamma
from tests.reference.mp_models import reference_model
from tests.reference.mp_prices import otm_values

KINDS = (Heston, Bates, DoubleHeston, VarianceGamma)  # the last has no variance factor
POINT = {"v0": 0.05, "kappa": 1.3, "theta": 0.07, "sigma": 0.5, "rho": -0.55}


def _slices(bid_ask=False):
    strikes = np.array([80.0, 95.0, 104.0, 120.0])
    out = []
    for tau, vols in ((0.3, [0.27, 0.22, 0.2, 0.19]), (1.5, [0.26, 0.24, 0.23, 0.22])):
        vols = np.array(vols)
        sides = (vols - [0.002, 0.001, 0.001, 0.004], vols + [0.002, 0.001, 0.001, 0.004]) if bid_ask else (None, None)
        out.append(CalibrationSlice(tau, 100.0, 0.97, strikes, vols, *sides))
    return out


def _between(coordinates, rng):
    return coordinates.lower + rng.uniform(0.05, 0.95, coordinates.lower.shape) * (
        coordinates.upper - coordinates.lower
    )


@pytest.mark.parametrize(
    ("kind", "feller"), [(kind, "report") for kind in KINDS] + [(kind, "require") for kind in KINDS[:3]]
)
def test_coordinates_and_back(kind, feller):
    """Parameters of a point lead back to it, and their derivatives are those of the map (central differences)."""
    coordinates = coordinates_of(kind, CalibrationSettings(feller=feller))
    rng = np.random.default_rng(7)
    for _ in range(20):
        x = _between(coordinates, rng)
        values, slope = coordinates.values(x)
        if not np.isfinite(values).all():
            assert feller == "require"  # no volatility of variance so small is in the room
            continue
        assert coordinates.place(values) == pytest.approx(x, rel=1e-9, abs=1e-9)
        for q in range(x.shape[0]):
            step = 1e-6 * np.eye(x.shape[0])[q]
            numeric = (coordinates.values(x + step)[0] - coordinates.values(x - step)[0]) / 2e-6
            assert slope[:, q] == pytest.approx(numeric, rel=1e-6, abs=1e-7)


@pytest.mark.parametrize("fixed", [{}, {"sigma": 0.6}, {"sigma": 0.6, "theta": 0.05}, {"kappa": 2.0}, {"theta": 0.03}])
def test_every_point_satisfies_feller_when_required(fixed):
    """``2 kappa theta >= sigma^2`` wherever the optimiser may go, corners included."""
    coordinates = coordinates_of(Heston, CalibrationSettings(feller="require", fixed=fixed))
    rng = np.random.default_rng(11)
    seen = 0
    for draw in range(300):
        share = (
            rng.choice([0.0, 1.0], coordinates.lower.shape) if draw % 3 == 0 else rng.random(coordinates.lower.shape)
        )
        values = coordinates.by_name(coordinates.lower + share * (coordinates.upper - coordinates.lower))
        if not np.isfinite(list(values.values())).all():
            continue  # a corner that admits nothing: the objective is infinite there
        seen += 1
        assert feller_ratio(values) >= 1.0
        for name, value in fixed.items():
            assert values[name] == value
    assert seen > 100


@pytest.mark.parametrize(
    ("settings", "argument"),
    [
        ({"bounds": {"kapa": (1.0, 2.0)}}, "bounds.kapa"),
        ({"bounds": {"kappa": (2.0, 1.0)}}, "bounds.kappa"),
        ({"bounds": {"rho": (-2.0, 0.0)}}, "bounds.rho"),
        ({"fixed": {"v0": -1.0}}, "fixed.v0"),
        ({"start": {"theta": float("nan")}}, "start.theta"),
        ({"start": {"kappa": 9.0}, "bounds": {"kappa": (1.0, 2.0)}}, "start.kappa"),
        ({"prior": Prior({"sigma": 99.0}, 1.0)}, "prior.parameters.sigma"),
        ({"fixed": POINT}, "fixed"),
        ({"fixed": {"sigma": 1.0, "theta": 0.01, "kappa": 1.0}, "feller": "require"}, "feller"),
    ],
)
def test_coordinates_refuse_by_name(settings, argument):
    """Each fault names the setting at fault."""
    with pytest.raises(InputError) as fault:
        coordinates_of(Heston, CalibrationSettings(**settings))
    assert fault.value.argument == argument
    assert fault.value.allowed


@pytest.mark.parametrize("residuals", ["vol", "price"])
@pytest.mark.parametrize("weights", ["uniform", "vega", "spread"])
def test_a_vol_point_everywhere_weighs_one(residuals, weights):
    """An error of 0.01 in every volatility has weighted mean square 1, to first order in prices."""
    quotes = lay_out(_slices(True), CalibrationSettings(residuals=residuals, weights=weights))
    error = 0.01 * (quotes.vega * quotes.money if residuals == "price" else np.ones(8))
    assert np.sqrt(np.mean((quotes.weights * error) ** 2)) == pytest.approx(1.0, rel=1e-12)


def test_spread_weights_are_inverse_half_spreads():
    """In volatility: 0.002 : 0.001 : 0.001 : 0.004 of the half spreads."""
    quotes = lay_out(_slices(True), CalibrationSettings(weights="spread"))
    assert quotes.weights[:4] / quotes.weights[0] == pytest.approx([1.0, 2.0, 2.0, 0.5], rel=1e-9)


def test_price_errors_over_vegas_are_vol_errors():
    """To first order the two kinds of residuals are the same at ``weights="vega"``: half a basis point."""
    price = lay_out(_slices(), CalibrationSettings(residuals="price", weights="vega"))
    vol = lay_out(_slices(), CalibrationSettings())
    small = 5e-5
    moved = otm_value(price.k, (price.vols + small) * price.root_tau) - price.value
    assert price.weights * price.money * moved == pytest.approx(vol.weights * small, rel=2e-3)


def test_what_cannot_be_used_is_left_out():
    """NaN, zero and negative volatilities, a missing or a crossed side with spread weights."""
    one = _slices(True)[0]
    vols = np.array([np.nan, 0.0, 0.2, 0.19])
    bids, asks = one.bid_vols.copy(), one.ask_vols.copy()
    bids[3] = 0.5
    bad = CalibrationSlice(one.expiry, 100.0, 0.97, one.strikes, vols, bids, asks)
    assert lay_out([bad], CalibrationSettings()).used[0].tolist() == [False, False, True, True]
    assert lay_out([bad], CalibrationSettings(weights="spread")).used[0].tolist() == [False, False, True, False]


def test_losses_are_scipys():
    """The optimiser with our loss ends where it ends with the one of the same name in scipy."""
    rng = np.random.default_rng(3)
    t = np.linspace(0.0, 1.0, 40)
    y = np.exp(-1.3 * t) + 0.01 * rng.standard_normal(40)
    y[::7] += 0.5

    def residuals(x):
        return x[0] * np.exp(-x[1] * t) - y

    for name in ("soft_l1", "huber"):
        loss = Loss(name, 0.05, 40)
        tight = {"ftol": 1e-14, "xtol": 1e-14, "gtol": 1e-14}
        ours = least_squares(residuals, [1.0, 1.0], loss=loss.of_squares, **tight)
        theirs = least_squares(residuals, [1.0, 1.0], loss=name, f_scale=0.05, **tight)
        assert ours.x == pytest.approx(theirs.x, rel=1e-7)
        assert loss.cost(ours.fun) == pytest.approx(theirs.cost, rel=1e-9)
        r = np.array([-0.2, -0.03, 0.01, 0.4])
        loss = Loss(name, 0.05, 4)
        step = 1e-7
        slope = [(loss.cost(r + step * e) - loss.cost(r - step * e)) / (2 * step) for e in np.eye(4)]
        assert loss.influence(r) == pytest.approx(slope, rel=1e-6)
        bend = (loss.influence(r + step) - loss.influence(r - step)) / (2 * step)
        assert loss.steepness(r) == pytest.approx(bend, rel=1e-5, abs=1e-8)


def test_priors_rows_stay_quadratic():
    """Rows behind the quotes are squares under any loss."""
    r = np.array([0.01, 3.0])
    assert Loss("huber", 0.05, 1).influence(r)[1] == 3.0


@pytest.mark.parametrize(("residuals", "feller"), [("vol", "require"), ("price", "report")])
def test_jacobian_against_multiple_precision(residuals, feller):
    """Columns are the derivatives of residuals remade from multiple-precision prices at shifted coordinates."""
    settings = CalibrationSettings(
        residuals=residuals, feller=feller, prior=Prior({"kappa": 2.0, "rho": -0.3}, 0.7), tolerance=1e-13
    )
    slices = [CalibrationSlice(0.7, 100.0, 0.97, np.array([85.0, 100.0, 118.0]), np.array([0.24, 0.22, 0.21]))]
    quotes, coordinates = lay_out(slices, settings), coordinates_of(Heston, settings)
    objective = Objective(Heston, quotes, coordinates, settings)
    objective.tighten()
    x = coordinates.place(np.array(list(POINT.values())))
    found = objective.at(x)

    def remade(at):
        values = coordinates.by_name(at)
        prices = otm_values(reference_model("heston", values), 0.7, 100.0, [85.0, 100.0, 118.0], digits=20)
        value = np.array([float(v) for v in prices])
        if residuals == "price":
            own = quotes.weights * quotes.money * (value - quotes.value)
        else:
            vols = implied_vols(
                97.0 * value,
                strikes=slices[0].strikes,
                forward=100.0,
                discount_factor=0.97,
                expiry=0.7,
                payoffs=[1, 0, 0],
            ).vols
            own = quotes.weights * (vols - quotes.vols)
        pulls = [np.sqrt(0.35) * (values["kappa"] - 2.0) / 2.0, np.sqrt(0.35) * (values["rho"] + 0.3)]
        return np.append(own / np.sqrt(3.0), pulls)

    assert found.residuals == pytest.approx(remade(x), rel=1e-8, abs=1e-10)
    step = 1e-5
    for q in range(5):
        e = step * np.eye(5)[q]
        slope = (remade(x + e) - remade(x - e)) / (2.0 * step)
        assert found.jacobian[:, q] == pytest.approx(slope, rel=1e-6, abs=1e-7)


def test_a_point_that_cannot_be_valued_is_infinite():
    """Variance Gamma where no forward exists: infinite residuals, from which the optimiser steps back."""
    settings = CalibrationSettings(model="variance_gamma")
    coordinates = coordinates_of(VarianceGamma, settings)
    objective = Objective(VarianceGamma, lay_out(_slices(), settings), coordinates, settings)
    found = objective.at(coordinates.place(np.array([0.2, 2.5, 5.0])))
    assert not found.valued
    assert np.isinf(found.residuals).all()


@pytest.mark.parametrize("name", ["black", "heston", "bates", "merton", "variance_gamma", "double_heston"])
def test_starts_are_admissible(name):
    """Every model starts somewhere its parameters admit, even from one slice of one strike."""
    from engine.calibration.settings import CALIBRATED

    one = CalibrationSlice(0.5, 100.0, 1.0, np.array([100.0]), np.array([0.2]))
    for slices in (_slices(), _slices()[:1], [one]):
        shape = shape_of(lay_out(slices, CalibrationSettings(model=name)))
        for start in automatic_starts(name, shape):
            model = model_from(CALIBRATED[name], start)
            model.check()
