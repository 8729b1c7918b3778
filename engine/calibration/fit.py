"""The fit: from slices and settings to a calibration, by ``scipy.optimize.least_squares``.

Trust-region reflective steps (Branch, Coleman and Li 1999) in the coordinates of ``engine.calibration.coordinates``,
in three stages:

1. *approach* from each start, pricing as exactly as the residuals deserve;
2. with a robust loss, its scale from the residuals of the linear fit (1.345 normal-consistent median absolute
   deviations: Huber 1981, from memory), and the approach again, until the scale no longer falls;
3. *settle* at the final pricing tolerance. A coordinate that has come to one of its ends and is pushed outward is put
   on the end exactly and held; it is let go again, for good, should the slope there point inward once the others have
   settled.

The answer of a fit that ends with held coordinates is ``at_bound``, not ``converged``.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.optimize import least_squares

from engine.arrays import Floats
from engine.calibration.coordinates import Coordinates, coordinates_of
from engine.calibration.diagnostics import Fitted, report
from engine.calibration.losses import Loss
from engine.calibration.objective import Evaluation, Objective
from engine.calibration.records import Calibration, CalibrationSettings, CalibrationSlice
from engine.calibration.settings import checked_kind
from engine.calibration.starts import automatic_starts, random_start, shape_of
from engine.calibration.weights import coerced, lay_out
from engine.errors import RefusedError

__all__ = ["calibrate"]

_NEAR = 1e-2  # of the way between the ends: near enough to be tried on the end itself
_ROUNDS = 6  # of holding and letting go
_RESCALED = 6  # times the scale of a robust loss is read again: outliers bend the fit they are first measured by
_SETTLED = 0.9  # of the last scale
_LEVEL = 1e-7  # of the cost, across the whole room of a coordinate
_TRIED = 2  # of the starts of models with jumps, those that begin nearest
_PERFECT = 1e-20  # cost (1e-12 in volatility) at which further starts cannot matter
_APPROACH = {"ftol": 1e-3, "xtol": 1e-4, "gtol": 1e-10}
_SETTLE = {"ftol": 1e-9, "xtol": 1e-8, "gtol": 1e-12}


@dataclass(frozen=True, slots=True)
class _Run:
    """Where a descent ended: coordinates, cost, accepted steps, whether the evaluations ran out."""

    x: Floats
    cost: float
    iterations: int
    stopped: bool


def calibrate(
    slices: Sequence[CalibrationSlice],
    settings: CalibrationSettings,
    *,
    progress: Callable[[int, int], None] | None = None,
) -> Calibration:
    """Fit a model to a surface. ``progress(done, total)`` is called as starts are finished; it may raise to cancel.

    Raises InputError (argument, index, allowed) for slices or settings that do not fit, and RefusedError where not even
    a start can be valued. That the fit did not converge, or ended on a bound, is in the answer.
    """
    kind = checked_kind(settings)
    slices = coerced(slices)
    quotes = lay_out(slices, settings)
    coordinates = coordinates_of(kind, settings)
    objective = Objective(kind, quotes, coordinates, settings)
    begins = _first_points(objective, settings)
    total = len(begins) + settings.starts - 1
    begins += _random_points(coordinates, begins[0], settings)
    runs: list[_Run] = []
    for done, x in enumerate(begins):
        if progress is not None:
            progress(done, total)
        objective.restart()
        if objective.at(x).valued:
            runs.append(_descend(objective, x, Loss.linear(), settings, _APPROACH))
        if runs and min(run.cost for run in runs) < _PERFECT:
            break
    if not runs:
        raise RefusedError(
            "slices",
            "could not be valued at any start: strikes too far out for the model, or settings that leave it no room",
            allowed="a surface that the model can value at its start",
        )
    best = min(runs, key=lambda run: run.cost)
    if len(runs) > 1:  # the last start was perhaps another one, with other residuals
        objective.restart()
        objective.at(best.x)
    fitted = _settled(objective, best, settings)
    if progress is not None:
        progress(total, total)
    return report(slices, settings, objective, fitted, [run.cost for run in runs])


def _first_points(objective: Objective, settings: CalibrationSettings) -> list[Floats]:
    """The automatic starts, overlaid with the caller's; of several, the ``_TRIED`` that begin nearest."""
    coordinates = objective.coordinates
    points = []
    for start in automatic_starts(objective.kind.name, shape_of(objective.quotes)):
        chosen = {**start, **settings.start}
        points.append(coordinates.place(np.array([chosen[name] for name in coordinates.names])))
    if len(points) == 1:
        return points
    costs = [_cost(objective.at(x)) for x in points]
    order = np.argsort(costs, kind="stable")[:_TRIED]
    return [points[i] for i in order]


def _cost(found: Evaluation) -> float:
    return float(0.5 * found.residuals @ found.residuals) if found.valued else np.inf


def _random_points(coordinates: Coordinates, first: Floats, settings: CalibrationSettings) -> list[Floats]:
    rng = np.random.default_rng(settings.seed)
    around = coordinates.by_name(first)
    drawn = [random_start(around, rng) for _ in range(settings.starts - 1)]
    return [coordinates.place(np.array([one[name] for name in coordinates.names])) for one in drawn]


def _descend(
    objective: Objective,
    x: Floats,
    loss: Loss,
    settings: CalibrationSettings,
    tolerances: dict[str, float],
    held: np.ndarray | None = None,
) -> _Run:
    """One call of the optimiser from ``x`` over the coordinates not held."""
    move = np.ones(x.shape, dtype=bool) if held is None else ~held
    if not move.any():
        return _Run(x, loss.cost(objective.at(x).residuals), 0, False)

    def full(part: Floats) -> Floats:
        out = x.copy()
        out[move] = part
        return out

    solve: Any = least_squares  # its stubs know no mapping of options
    found = solve(
        lambda part: objective.at(full(part)).residuals,
        x[move],
        jac=lambda part: objective.at(full(part)).jacobian[:, move],
        bounds=(objective.coordinates.lower[move], objective.coordinates.upper[move]),
        x_scale="jac",
        loss=loss.of_squares if loss.robust else "linear",
        max_nfev=settings.max_evaluations,
        **tolerances,
    )
    return _Run(full(found.x), float(found.cost), int(found.njev), found.status == 0)


def _settled(objective: Objective, best: _Run, settings: CalibrationSettings) -> Fitted:
    """Robust loss if asked for, final tolerance, coordinates held on their ends (module docstring)."""
    iterations, loss = best.iterations, Loss.linear()
    if settings.loss != "linear":
        objective.restart()
        for _ in range(_RESCALED):
            last, loss = loss, Loss.scaled(settings.loss, objective.at(best.x).residuals, objective.quote_count)
            if last.robust and loss.scale > _SETTLED * last.scale:
                loss = last
                break
            best = _descend(objective, best.x, loss, settings, _APPROACH)
            iterations += best.iterations
    objective.tighten()
    held, released = np.zeros(best.x.shape, dtype=bool), np.zeros(best.x.shape, dtype=bool)
    run = best
    for _ in range(_ROUNDS):
        x, held = _on_ends(objective, run.x, held, released, loss)
        run = _descend(objective, x, loss, settings, _SETTLE, held)
        iterations += run.iterations
        wrong = held & ~_pushed_out(objective, run.x, loss)
        arrived = _arrived(objective, run.x, held | released, loss)
        if run.stopped or not (wrong.any() or arrived.any()):
            break
        if wrong.any():
            held, released = held & ~wrong, released | wrong
            margin = 2.0 * _NEAR * (objective.coordinates.upper - objective.coordinates.lower)
            inside = np.clip(run.x, objective.coordinates.lower + margin, objective.coordinates.upper - margin)
            run = replace(run, x=np.where(wrong, inside, run.x))
    return Fitted(objective.at(run.x), held, loss, iterations, best.stopped or run.stopped)


def _on_ends(
    objective: Objective, x: Floats, held: np.ndarray, released: np.ndarray, loss: Loss
) -> tuple[Floats, np.ndarray]:
    """Put the coordinates that have arrived on their ends, if the surface can be valued there."""
    arrived = _arrived(objective, x, held | released, loss)
    if not arrived.any():
        return x, held
    lower, upper = objective.coordinates.lower, objective.coordinates.upper
    on = np.where(arrived, np.where(x - lower < upper - x, lower, upper), x)
    return (on, held | arrived) if objective.at(on).valued else (x, held)


def _arrived(objective: Objective, x: Floats, apart: np.ndarray, loss: Loss) -> np.ndarray:
    """Coordinates near an end and pushed outward, those ``apart`` left out."""
    lower, upper = objective.coordinates.lower, objective.coordinates.upper
    near = np.minimum(x - lower, upper - x) < _NEAR * (upper - lower)
    return np.asarray(near & ~apart & _pushed_out(objective, x, loss))


def _pushed_out(objective: Objective, x: Floats, loss: Loss) -> np.ndarray:
    """Whether the cost falls toward the nearer end, or is all but level there."""
    lower, upper = objective.coordinates.lower, objective.coordinates.upper
    found = objective.at(x)
    gradient = found.jacobian.T @ loss.influence(found.residuals)
    outward = np.where(x - lower < upper - x, gradient, -gradient)
    return np.asarray(outward * (upper - lower) >= -_LEVEL * loss.cost(found.residuals))
