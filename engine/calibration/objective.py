"""Residuals of a whole surface and their analytic Jacobian, from one batched evaluation.

With ``c(k)`` the model's undiscounted out-of-the-money value per unit forward and ``s`` the total deviation of its
implied volatility, ``c(k) = Black(k, s)``, so that along a parameter

    d vol / d parameter = (dc / d parameter) / (n(d1) sqrt(tau)),        d price / d parameter = F D dc / d parameter

and ``dc / d parameter`` comes from the model's gradient under the same integral as ``c``. The residuals handed to the
optimiser are

    w_i e_i / sqrt(n)                                               quotes, weights as in ``engine.calibration.weights``
    sqrt(strength / m) (parameter_j - prior_j) / max(|prior_j|, unit)          the pull toward a prior, m parameters

with the unit 1 for a correlation and 0.01 for the rest, where a prior of zero has no size of its own.

Accuracy. The prices of an evaluation are asked for with the relative tolerance ``0.1 r^2``, ``r`` being the smallest
root-mean-square error relative to the volatilities so far: pricing errors stay below the square of what is left to be
fitted, which is what a Gauss-Newton step leaves in its turn. ``tighten`` ends that and fixes the tolerance at ``1e-9
r``, at most 1e-10 and not below the one of the settings: the last steps are taken, and the fit is judged, on prices
whose error is far below the residuals, so that the two cannot cancel.

Where a trial cannot be valued (no forward exists, too many nodes, a price below the double range) its residuals are
infinite, from which the optimiser steps back.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from engine.arrays import Floats
from engine.black import total_deviation
from engine.calibration.coordinates import Coordinates, model_from
from engine.calibration.records import CalibrationSettings
from engine.calibration.weights import Quotes, density_of
from engine.errors import InputError, RefusedError
from engine.protocols import Model
from engine.smile import NODE_LIMIT
from engine.status import Status
from engine.transform.kernels import VANILLA
from engine.values import kernel_values

__all__ = ["LOOSEST", "Evaluation", "Objective"]

LOOSEST = 1e-6
_QUADRATIC = 0.1
_FAR_BELOW, _LAST = 1e-9, 1e-10


@dataclass(frozen=True, slots=True)
class Evaluation:
    """The surface at one point: residuals (n + m,), Jacobian (n + m, q), ``vols`` and ``value`` (n,) of the model,
    ``slopes`` (P, n) of the values by its parameters."""

    x: Floats
    residuals: Floats
    jacobian: Floats
    vols: Floats
    value: Floats
    slopes: Floats

    @property
    def valued(self) -> bool:
        """Whether the model could be valued here."""
        return bool(np.isfinite(self.residuals).all())


class Objective:
    """The surface as a function of the coordinates; counts its evaluations and keeps the last one."""

    def __init__(
        self, kind: type[Model], quotes: Quotes, coordinates: Coordinates, settings: CalibrationSettings
    ) -> None:
        self.kind, self.quotes, self.coordinates, self.settings = kind, quotes, coordinates, settings
        self.evaluations = 0
        self.tolerance = LOOSEST
        self._adapts = True
        self._best = np.inf
        self._last: Evaluation | None = None
        self._rough: Evaluation | None = None
        # planned like the value (no growth); the bounds, which that makes worthless for the derivatives, are not read
        self._kernels = [VANILLA] + [replace(VANILLA, parameter=i) for i in range(len(coordinates.names))]
        self._prior = _prior_rows(coordinates, settings)

    @property
    def quote_count(self) -> int:
        """Residuals that are quotes; the prior's follow."""
        return int(self.quotes.k.shape[0])

    def restart(self) -> None:
        """Forget how good a former run was: the tolerance follows the residuals anew."""
        self._adapts, self._best, self.tolerance, self._last = True, np.inf, LOOSEST, None
        self._rough = None

    def tighten(self) -> None:
        """From now on every evaluation is made with one tolerance, far below the residuals. The point at hand is valued
        anew when it comes back; its derivatives, which only steer, stand."""
        far_below = float(
            np.clip(_FAR_BELOW * self._best, self.settings.tolerance, max(_LAST, self.settings.tolerance))
        )
        self._adapts, self.tolerance, self._rough, self._last = False, far_below, self._last, None

    def at(self, x: Floats) -> Evaluation:
        """Values and Jacobian at ``x`` (q,); the last point is kept."""
        if self._last is not None and np.array_equal(self._last.x, x):
            return self._last
        found = self._evaluate(np.array(x, dtype=np.float64))
        self._last = found
        if self._adapts and found.valued:
            error = (found.vols - self.quotes.vols) / self.quotes.vols
            self._best = min(self._best, float(np.sqrt(np.mean(error * error))))
            self.tolerance = float(np.clip(_QUADRATIC * self._best**2, self.settings.tolerance, LOOSEST))
        return found

    def _evaluate(self, x: Floats) -> Evaluation:
        quotes, pull = self.quotes, self._prior
        self.evaluations += 1
        values, slope = self.coordinates.values(x)
        rough = self._rough if self._rough is not None and np.array_equal(self._rough.x, x) else None
        found = self._priced(values, rough.slopes if rough is not None and rough.valued else None)
        if found is None:
            return self._nothing(x)
        deviation = total_deviation(quotes.k, found[0])
        vols = deviation.deviations / quotes.root_tau
        if self.settings.residuals == "vol":
            error = vols - quotes.vols
            scale = quotes.weights / (density_of(quotes.k, deviation.deviations) * quotes.root_tau)
        else:
            error = (found[0] - quotes.value) * quotes.money
            scale = quotes.weights * quotes.money
        root = np.sqrt(self.quote_count)
        rows = (scale / root)[:, None] * (found[1:].T @ slope)
        residuals = np.concatenate([quotes.weights * error / root, pull.scale * (values[pull.at] - pull.toward)])
        jacobian = np.concatenate([rows, pull.scale[:, None] * slope[pull.at]])
        sound = (deviation.statuses == int(Status.OK)).all() and np.isfinite(jacobian).all()
        if not (sound and np.isfinite(residuals).all()):
            return self._nothing(x)
        return Evaluation(x, residuals, jacobian, vols, found[0], found[1:])

    def _priced(self, values: Floats, slopes: Floats | None) -> Floats | None:
        """Values and their derivatives by the parameters (1 + P, n), or None where the model cannot be valued; only the
        values where the ``slopes`` are known."""
        if not np.isfinite(values).all():
            return None
        quotes, kernels = self.quotes, self._kernels if slopes is None else self._kernels[:1]
        model = model_from(self.kind, dict(zip(self.coordinates.names, values, strict=True)))
        try:
            model.check()
            (group,) = kernel_values(
                [model] * quotes.batch.starts.shape[0],
                quotes.batch,
                quotes.k,
                kernels_of=lambda _: kernels,
                tolerance=self.tolerance,
                node_limit=NODE_LIMIT,
            )
        except (InputError, RefusedError):
            return None
        return group.value if slopes is None else np.concatenate([group.value, slopes])

    def _nothing(self, x: Floats) -> Evaluation:
        rows, none = self.quote_count + len(self._prior.at), np.full(self.quotes.k.shape, np.nan)
        return Evaluation(x, np.full(rows, np.inf), np.zeros((rows, x.shape[0])), none, none, none[None, :])


@dataclass(frozen=True, slots=True)
class _Pull:
    """Places of the parameters pulled, where to, and the weight of each."""

    at: list[int]
    toward: Floats
    scale: Floats


def _prior_rows(coordinates: Coordinates, settings: CalibrationSettings) -> _Pull:
    prior = settings.prior
    if prior is None or prior.strength == 0.0:
        return _Pull([], np.zeros(0), np.zeros(0))
    at = [i for i in coordinates.free if coordinates.names[i] in prior.parameters]
    toward = np.array([float(prior.parameters[coordinates.names[i]]) for i in at])
    units = np.array([1.0 if coordinates.names[i].split(".")[-1] == "rho" else 0.0 for i in at])
    sizes = np.where(units > 0.0, units, np.maximum(np.abs(toward), 0.01))
    return _Pull(at, toward, np.sqrt(prior.strength / max(len(at), 1)) / sizes)
