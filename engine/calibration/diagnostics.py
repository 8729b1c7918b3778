"""What a fit is worth: standard errors, correlation, conditioning, errors in volatility, and doubts in plain words.

With the residuals ``r`` of the quotes, their Jacobian ``J`` by the coordinates that are free to move, the rows ``P`` of
a prior and the derivatives ``psi`` and ``psi'`` of the loss,

    H = J' diag(psi') J + P' P,        covariance of the coordinates = H^-1 J' J H^-1 n/(n - q) mean(psi^2)

the asymptotic covariance of an M-estimator, equal to ``(J' J)^-1 sum r^2 / (n - q)`` for plain least squares (Huber
1981, section 7.6, from memory, with the mean of ``psi'`` in ``H`` in place of each one), carried over to the
parameters by their derivatives. It takes the weighted errors of the quotes to be independent and alike, and it does
not know how far a prior has pulled. The condition number is that of ``J`` by the coordinates: relative changes of
positive parameters, absolute ones of the rest.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats
from engine.calibration.coordinates import feller_ratio, model_from
from engine.calibration.doubts import Doubts, warnings_of
from engine.calibration.losses import Loss
from engine.calibration.objective import Evaluation, Objective
from engine.calibration.records import CalibratedSlice, Calibration, CalibrationSettings, CalibrationSlice
from engine.slices import Slice
from engine.smile import price_smiles
from engine.status import Payoff

__all__ = ["Fitted", "report"]

_SINGULAR = 1e-13  # relative eigenvalue of the scaled information below which nothing is known along its vector
_INVOLVED = 1e-3


@dataclass(frozen=True, slots=True)
class Fitted:
    """The end of a fit: the surface there, coordinates held on an end (q,), the loss, accepted steps, and whether the
    evaluations ran out."""

    at: Evaluation
    held: np.ndarray
    loss: Loss
    iterations: int
    stopped: bool


@dataclass(frozen=True, slots=True)
class _Errors:
    """Standard errors by parameter, correlation of those that have one, condition number."""

    standard: dict[str, float | None]
    correlation: Floats
    order: tuple[str, ...]
    condition: float


def report(
    slices: Sequence[CalibrationSlice],
    settings: CalibrationSettings,
    objective: Objective,
    fitted: Fitted,
    costs: Sequence[float],
) -> Calibration:
    """The answer, from the end of the fit. ``costs``: where each start ended."""
    coordinates, quotes = objective.coordinates, objective.quotes
    parameters = coordinates.by_name(fitted.at.x)
    errors = _errors(objective, fitted)
    at_bound = [coordinates.names[i] for i, held in zip(coordinates.free, fitted.held, strict=True) if held]
    columns = _columns(slices, objective, fitted)
    difference = fitted.at.vols - quotes.vols
    price = (fitted.at.value - quotes.value) * quotes.money
    ratio = feller_ratio(parameters)
    status = "stopped" if fitted.stopped else "at_bound" if at_bound else "converged"
    return Calibration(
        model=settings.model,
        status=status,
        parameters=parameters,
        standard_errors=errors.standard,
        correlation=errors.correlation,
        correlation_order=errors.order,
        at_bound=at_bound,
        condition_number=errors.condition,
        feller_ratio=ratio,
        rmse_vol=_rms(difference),
        rmse_price=_rms(price),
        max_abs_error_vol=float(np.max(np.abs(difference))),
        within_spread=_within_spread(slices, columns),
        iterations=fitted.iterations,
        evaluations=objective.evaluations,
        slices=columns,
        warnings=_warnings(objective, settings, errors, status, parameters, at_bound, costs),
    )


def _warnings(
    objective: Objective, settings: CalibrationSettings, errors: _Errors, status: str, parameters: dict[str, float],
    at_bound: list[str], costs: Sequence[float],
) -> list[str]:  # fmt: skip
    coordinates, quotes = objective.coordinates, objective.quotes
    doubts = Doubts(
        status=status,
        parameters=parameters,
        standard_errors=errors.standard,
        correlation=errors.correlation,
        order=errors.order,
        held=at_bound,
        ends=coordinates.ends,
        dependent=[one.dependent_name(coordinates.names) for one in coordinates.feller],
        feller=feller_ratio(parameters),
        quotes=int(quotes.k.shape[0]),
        left_out=int(sum(mask.size - np.count_nonzero(mask) for mask in quotes.used)),
        expiries=int(quotes.batch.starts.shape[0]),
        costs=tuple(costs),
    )
    return warnings_of(doubts, settings)


def _rms(errors: Floats) -> float:
    return float(np.sqrt(np.mean(errors * errors)))


def _errors(objective: Objective, fitted: Fitted) -> _Errors:
    names = objective.coordinates.names
    move = ~fitted.held
    n, q = objective.quote_count, int(move.sum())
    found = fitted.at
    rows = found.jacobian[:n, move]
    nothing = _Errors(dict.fromkeys(names), np.zeros((0, 0)), (), np.inf)
    if q == 0:
        return nothing
    singular = np.linalg.svd(rows, compute_uv=False)
    condition = float(singular[0] / singular[-1]) if n >= q and singular[-1] > 0.0 else np.inf
    if n <= q:
        return _Errors(nothing.standard, nothing.correlation, (), condition)
    covariance, unknown = _covariance(rows, found.jacobian[n:, move], fitted.loss, found.residuals[:n], n - q)
    slope = objective.coordinates.values(found.x)[1][:, move]
    by_parameter = slope @ covariance @ slope.T
    lost = (np.abs(slope) @ unknown.astype(float)) > 0.0
    known = (np.diag(by_parameter) >= 0.0) & (np.abs(slope).max(axis=1) > 0.0) & ~lost
    deviation = np.sqrt(np.maximum(np.diag(by_parameter), 0.0))
    standard: dict[str, float | None] = {
        name: float(deviation[i]) if known[i] else None for i, name in enumerate(names)
    }
    at = np.flatnonzero(known & (deviation > 0.0))
    correlation = by_parameter[np.ix_(at, at)] / np.outer(deviation[at], deviation[at])
    correlation = np.clip(0.5 * (correlation + correlation.T), -1.0, 1.0)
    np.fill_diagonal(correlation, 1.0)
    return _Errors(standard, correlation, tuple(names[i] for i in at), condition)


def _covariance(rows: Floats, prior: Floats, loss: Loss, residuals: Floats, freedom: int) -> tuple[Floats, np.ndarray]:
    """Covariance of the coordinates, and which of them are involved in a direction nothing is known about."""
    one = Loss(loss.name, loss.scale, rows.shape[0])
    steep = float(np.mean(one.steepness(residuals)))
    push = one.influence(residuals)
    information = max(steep, 1e-3) * rows.T @ rows + prior.T @ prior
    scale = np.sqrt(np.diag(information))
    unknown = scale == 0.0
    scale = np.where(unknown, 1.0, scale)
    values, vectors = np.linalg.eigh(information / np.outer(scale, scale))
    blind = values <= _SINGULAR * values[-1]
    unknown |= (np.abs(vectors[:, blind]) > _INVOLVED).any(axis=1)
    inverse = (vectors[:, ~blind] / values[~blind]) @ vectors[:, ~blind].T / np.outer(scale, scale)
    variance = float(push @ push) / freedom
    return inverse @ (rows.T @ rows) @ inverse * variance, unknown


def _columns(slices: Sequence[CalibrationSlice], objective: Objective, fitted: Fitted) -> list[CalibratedSlice]:
    """Model volatilities at every strike sent, used or not; the latter cost one more evaluation."""
    used = objective.quotes.used
    if all(mask.all() for mask in used):
        ends = np.cumsum([mask.size for mask in used])
        model_vols = np.split(fitted.at.vols, ends[:-1])
    else:
        model = model_from(objective.kind, objective.coordinates.by_name(fitted.at.x))
        otm = [np.full(one.strikes.shape, int(Payoff.OTM), dtype=np.uint8) for one in slices]
        whole = [
            Slice(one.expiry, one.forward, one.discount_factor, one.strikes, payoffs)
            for one, payoffs in zip(slices, otm, strict=True)
        ]
        objective.evaluations += 1
        model_vols = [one.implied_vols for one in price_smiles(model, whole, tolerance=objective.settings.tolerance)]
    return [
        CalibratedSlice(one.expiry, one.strikes, one.vols, vols, vols - one.vols, mask.copy())
        for one, vols, mask in zip(slices, model_vols, used, strict=True)
    ]


def _within_spread(slices: Sequence[CalibrationSlice], columns: Sequence[CalibratedSlice]) -> float | None:
    inside = quoted = 0
    for one, column in zip(slices, columns, strict=True):
        if one.bid_vols is None or one.ask_vols is None:
            continue
        both = column.used & np.isfinite(one.bid_vols) & np.isfinite(one.ask_vols)
        with np.errstate(invalid="ignore"):
            held = both & (column.model_vols >= one.bid_vols) & (column.model_vols <= one.ask_vols)
        quoted += int(both.sum())
        inside += int(held.sum())
    return inside / quoted if quoted else None
