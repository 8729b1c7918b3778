"""A cold Heston fit of ten expiries by twenty strikes: against differences through our own transform, against
textbook integrals, and the cost of the Jacobian.

The surface has normal errors of 0.002 in volatility, so that there is a minimum to be found and not a zero. The fit by
differences begins at the same automatic start and ends at the same minimum; the distance between the minima stands
beside the times. The textbook fit begins at parameters of a textbook and prices every option by two adaptive
quadratures (Heston 1993, equations 17 and 18, in the form without branch jumps of Albrecher et al. 2007), turning
prices into volatilities by bracketing. It is timed on six options, once with the functions of ``cmath`` and once with
those of numpy on single numbers, as it is mostly written (common practice, no source); evaluations are those that the
same optimiser needs from that start, and the time of the whole fit is scaled from the two.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from scipy.integrate import quad
from scipy.optimize import brentq, least_squares
from scipy.special import ndtr

from engine.calibration import CalibrationSettings, CalibrationSlice, calibrate
from engine.calibration.coordinates import Coordinates, coordinates_of
from engine.calibration.objective import Objective
from engine.calibration.starts import automatic_starts, shape_of
from engine.calibration.weights import lay_out
from engine.models.heston import Heston
from engine.slices import Slice
from engine.smile import price_smiles
from engine.transform import plan_cache
from tests.bench.table import Table, count, error, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "calibration of a surface, its Jacobian, and the usual ways beside it"
EXPIRIES = (1 / 12, 1 / 6, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
STRIKES, FORWARD = 20, 100.0
MODELS = (
    ("calm", Heston(0.04, 1.5, 0.06, 0.4, -0.7)),
    ("skewed", Heston(0.03, 2.5, 0.05, 0.9, -0.6)),
    ("slow", Heston(0.09, 0.6, 0.05, 0.5, -0.4)),
)
TEXTBOOK = (0.04, 1.0, 0.04, 0.5, -0.5)  # v0, kappa, theta, sigma, rho
TOLERANCE = 1e-11  # of prices whose differences are taken: that of the calibration's last stage here
TIGHT = {"ftol": 1e-9, "xtol": 1e-8, "gtol": 1e-12}  # as the calibration's last stage
SETTINGS = CalibrationSettings()


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Three tables: the fit, the Jacobian, the textbook way."""
    cases = MODELS[:1] if watch.quick else MODELS
    surfaces = {name: _surface(model, 3 if watch.quick else len(EXPIRIES)) for name, model in cases}
    yield _fits(watch, surfaces)
    yield _jacobians(watch, surfaces)
    yield _textbook(watch, *next(iter(surfaces.items())))


def _surface(model: Heston, expiries: int) -> list[CalibrationSlice]:
    rng = np.random.default_rng(20261201)
    out = []
    for tau in EXPIRIES[:expiries]:
        strikes = FORWARD * np.exp(np.linspace(-2.0, 1.6, STRIKES) * 0.22 * np.sqrt(tau))
        one = Slice(tau, FORWARD, 1.0, strikes, np.full(STRIKES, 2, dtype=np.uint8))
        vols = price_smiles(model, [one], tolerance=1e-12)[0].implied_vols
        out.append(CalibrationSlice(tau, FORWARD, 1.0, strikes, vols + 0.002 * rng.standard_normal(STRIKES)))
    return out


@dataclass(slots=True)
class _Plain:
    """The same residuals from values alone; differences are the optimiser's own."""

    surface: list[CalibrationSlice]
    coordinates: Coordinates
    evaluations: int = 0
    market: np.ndarray = field(init=False)
    slices: list[Slice] = field(init=False)

    def __post_init__(self) -> None:
        self.market = np.concatenate([one.vols for one in self.surface])
        self.slices = [
            Slice(s.expiry, s.forward, s.discount_factor, s.strikes, np.full(s.strikes.shape, 2, dtype=np.uint8))
            for s in self.surface
        ]

    def residuals(self, x: np.ndarray) -> np.ndarray:
        """Weighted as the calibration's."""
        self.evaluations += 1
        model = Heston(*self.coordinates.values(x)[0])
        found = price_smiles(model, self.slices, tolerance=TOLERANCE)
        error = np.concatenate([one.implied_vols for one in found]) - self.market
        return error / (0.01 * np.sqrt(error.shape[0]))

    def fit(self, x: np.ndarray) -> np.ndarray:
        """Trust-region reflective with forward differences."""
        found = least_squares(
            self.residuals, x, bounds=(self.coordinates.lower, self.coordinates.upper), x_scale="jac", **TIGHT
        )
        return np.asarray(self.coordinates.values(found.x)[0])


def _begin(surface: list[CalibrationSlice]) -> tuple[Coordinates, np.ndarray]:
    coordinates = coordinates_of(Heston, SETTINGS)
    start = automatic_starts("heston", shape_of(lay_out(surface, SETTINGS)))[0]
    return coordinates, coordinates.place(np.array([start[name] for name in coordinates.names]))


def _fits(watch: Stopwatch, surfaces: dict[str, list[CalibrationSlice]]) -> Table:
    table = Table(
        f"Cold Heston fits of {len(next(iter(surfaces.values())))} expiries x {STRIKES} strikes",
        (
            "surface",
            "calibrate",
            "evaluations",
            "goal",
            "rmse, vol",
            "by differences",
            "of calibrate",
            "goal",
            "evaluations",
            "apart",
        ),
        notes=[
            "apart: largest relative distance of the parameters of the two minima",
            "the plan cache is emptied first",
        ],
    )
    for name, surface in surfaces.items():
        coordinates, x = _begin(surface)
        fit = calibrate(surface, SETTINGS)
        plain = _Plain(surface, coordinates)
        there = plain.fit(x)
        evaluations = plain.evaluations

        def ours(surface: list[CalibrationSlice] = surface) -> object:
            plan_cache.clear()
            return calibrate(surface, SETTINGS)

        def theirs(plain: _Plain = plain, x: np.ndarray = x) -> object:
            plan_cache.clear()
            return plain.fit(x)

        times = watch.together({"ours": ours, "theirs": theirs})
        here = np.array(list(fit.parameters.values()))
        table.add(
            name,
            seconds(times["ours"].best),
            count(fit.evaluations),
            "<= 20",
            error(fit.rmse_vol),
            seconds(times["theirs"].best),
            ratio(times["theirs"].best, times["ours"].best),
            ">= 3 x",
            count(evaluations),
            error(float(np.max(np.abs(there / here - 1.0)))),
        )
    return table


def _jacobians(watch: Stopwatch, surfaces: dict[str, list[CalibrationSlice]]) -> Table:
    table = Table(
        "One evaluation of the surface: volatilities alone, and with their Jacobian by five parameters",
        ("surface, tolerance", "value", "value and Jacobian", "of value", "goal"),
        notes=["at the start of the fit; the plan cache is emptied first"],
    )
    for name, surface in surfaces.items():
        coordinates, x = _begin(surface)
        plain = _Plain(surface, coordinates)
        model = Heston(*coordinates.values(x)[0])
        for tolerance in (1e-6, 1e-8, 1e-10, 1e-12):
            settings = CalibrationSettings(tolerance=tolerance)
            objective = Objective(Heston, lay_out(surface, settings), coordinates, settings)

            def both(objective: Objective = objective, x: np.ndarray = x, tolerance: float = tolerance) -> object:
                plan_cache.clear()
                objective.restart()
                objective.tighten()
                objective.tolerance = tolerance
                return objective.at(x)

            def value(plain: _Plain = plain, model: Heston = model, tolerance: float = tolerance) -> object:
                plan_cache.clear()
                return price_smiles(model, plain.slices, tolerance=tolerance)

            times = watch.together({"value": value, "both": both})
            table.add(
                f"{name}, {tolerance:g}",
                seconds(times["value"].best),
                seconds(times["both"].best),
                ratio(times["both"].best, times["value"].best),
                "<= 4 x",
            )
    return table


# --- the textbook way -------------------------------------------------------------------------------------------------


def _probability(j: int, k: float, tau: float, p: tuple[float, ...], f: Any) -> float:
    """Heston's P1 or P2; ``f`` is cmath or numpy."""
    v0, kappa, theta, sigma, rho = p

    def integrand(u: float) -> float:
        z = complex(u, -1.0 if j == 1 else 0.0)
        b = kappa - rho * sigma * 1j * z
        d = f.sqrt(b * b + sigma * sigma * (z * z + 1j * z))
        g = (b - d) / (b + d)
        e = f.exp(-d * tau)
        c = kappa * theta / sigma**2 * ((b - d) * tau - 2.0 * f.log((1.0 - g * e) / (1.0 - g)))
        phi = f.exp(c + v0 / sigma**2 * (b - d) * (1.0 - e) / (1.0 - g * e))
        return float((f.exp(-1j * u * k) * phi / (1j * u)).real)

    return 0.5 + float(quad(integrand, 0.0, math.inf, epsabs=1e-10, epsrel=1e-10, limit=500)[0]) / math.pi


def _textbook_vol(strike: float, tau: float, p: tuple[float, ...], f: Any) -> float:
    k = math.log(strike / FORWARD)
    call = FORWARD * _probability(1, k, tau, p, f) - strike * _probability(2, k, tau, p, f)

    def gap(vol: float) -> float:
        s = vol * math.sqrt(tau)
        d1 = -k / s + 0.5 * s
        return float(FORWARD * ndtr(d1) - strike * ndtr(d1 - s)) - call

    return float(brentq(gap, 1e-3, 5.0, xtol=1e-10))


def _textbook(watch: Stopwatch, name: str, surface: list[CalibrationSlice]) -> Table:
    """Time per option from six options, evaluations from the fit by differences."""
    table = Table(
        f"Textbook fit of the surface {name}: {len(surface) * STRIKES} options, forward differences",
        ("functions of", "one option", "evaluations", "fit, scaled", "calibrate", "of calibrate", "goal", "error, vol"),
        notes=["scaled: time of one option x options x evaluations of the same fit through our transform, same start"],
    )
    coordinates, _ = _begin(surface)
    plain = _Plain(surface, coordinates)
    plain.fit(coordinates.place(np.array(TEXTBOOK)))
    chosen = [(surface[i], at) for i in (1, -1) for at in (4, 10, 15)]

    def six(f: Any) -> list[float]:
        return [_textbook_vol(float(one.strikes[at]), one.expiry, TEXTBOOK, f) for one, at in chosen]

    def ours() -> object:
        plan_cache.clear()
        return calibrate(surface, SETTINGS)

    model = Heston(*TEXTBOOK)
    exact = np.array(
        [
            price_smiles(model, [Slice(s.expiry, FORWARD, 1.0, s.strikes[at : at + 1], np.array([2], np.uint8))])[
                0
            ].implied_vols[0]
            for s, at in chosen
        ]
    )
    times = watch.together({"cmath": lambda: six(cmath), "numpy": lambda: six(np), "ours": ours})
    for f in (cmath, np):
        one = times[f.__name__].best / len(chosen)
        whole = one * len(surface) * STRIKES * plain.evaluations
        table.add(
            f.__name__,
            seconds(one),
            count(plain.evaluations),
            seconds(whole),
            seconds(times["ours"].best),
            ratio(whole, times["ours"].best),
            ">= 500 x",
            error(float(np.max(np.abs(np.array(six(f)) - exact)))),
        )
    return table
