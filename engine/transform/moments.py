"""What the moments of ``X`` say before any transform: values to expect, tails to bound, exponents to choose.

For each slice, ``log M(p)`` on two grids of real moment orders, ``p = 1 + x`` (calls) and ``p = -x`` (puts), ``x > 0``,
geometric in the middle and crowding towards the edges of the strip. Puts are calls under the share measure, so after
the reflection ``p -> 1 - p``, ``k -> -k`` both sides read alike; a *side* is one of the two.

    J(x, kr) = log M - log(x (1 + x)) - x kr               saddle function at reflected log-moneyness kr >= 0
    log V(kr) ~ min_x J - log(2 pi J'') / 2                            (Lord and Kahl 2007; an estimate, for planning)
    V(kr) <= c(x) M exp(-x kr),   c(x) = x^x / (1 + x)^(1 + x)          (Markov's inequality; a bound, for aliases)

The last line is ``(e^X - e^k)^+ <= c(x) e^{p X - (p - 1) k}``, tight where the power touches the payoff.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats, Ints
from engine.protocols import Model
from engine.transform.reach import Reach

__all__ = ["NOTHING", "SideMoments", "side_moments"]

POINTS = 64
_LOWEST = 0.15  # of 1/s, or of the way to the edge of a narrow strip: below it the pole at x = 0 dominates
NOTHING = -700.0  # log of a value that is below the double range for every purpose
_JUMP = 400.0  # twice what a normal log price shows at the end of the grid
_CROWDED = 30.0  # the grid's last point comes this many times nearer to a cliff than the cliff is to 0
_QUADRUPLINGS = 20
_HIGHEST = 40.0  # of 1/s, at least: Gaussian aliases at exp(-40^2/2) underflow any double


@dataclass(frozen=True, slots=True)
class SideMoments:
    """Grids per side; first all call sides, then all put sides: arrays of shape (2 S, POINTS)."""

    x: Floats
    log_moment: Floats
    saddle: Floats  # J(x, 0)
    log_power: Floats  # log c(x)
    low: Floats  # edges of the strip per slice, (S,)
    high: Floats
    spread: Floats  # log(2 pi J'') / 2

    def log_value(self, side: Ints, kr: Floats) -> Floats:
        """Estimated log of the out-of-the-money value per unit forward in the side's own measure. Shape of ``kr``."""
        level = self.saddle[side] - self.x[side] * kr[:, None]
        best = np.argmin(level, axis=1)
        at = np.arange(best.shape[0])
        return np.asarray(level[at, best] - self.spread[side, best])

    def log_most(self, kr: Floats) -> Floats:
        """Markov's bound on the log of the value at one ``kr`` per side, (2 S,)."""
        return np.asarray(np.min(self.log_power + self.log_moment - self.x * kr[:, None], axis=1))

    def last(self, near: Floats, far: Floats) -> Floats:
        """Where each side's values sink below ``NOTHING`` between ``near`` and ``far``, (2 S,); ``far`` if they do
        not."""
        sinks = self.log_most(far) < NOTHING
        if not sinks.any():
            return far
        low, high = near, far
        for _ in range(40):
            middle = 0.5 * (low + high)
            gone = self.log_most(middle) < NOTHING
            low, high = np.where(gone, low, middle), np.where(gone, middle, high)
        return np.where(sinks, high, far)

    def loss(self, side: Ints, kr: Floats) -> Floats:
        """``J(x, kr) - min_x J(x, kr)`` for every grid point: units in the exponent lost there. Shape (n, POINTS)."""
        level = self.saddle[side] - self.x[side] * kr[:, None]
        return np.asarray(level - level.min(axis=1, keepdims=True))


def side_moments(model: Model, tau: Floats, reach: Reach) -> SideMoments:
    """Moment grids of every slice. ``tau``: (S, 1)."""
    s = np.sqrt(model.mean_variance(tau)).reshape(-1, 1)
    low, high = (np.reshape(edge, (-1, 1)) for edge in model.strip(tau))
    scale = np.concatenate([s, s])
    room = np.maximum(np.concatenate([high - 1.0, -low]), 1e-100)  # an edge at 1 or 0 itself leaves no room
    top = np.maximum(_HIGHEST, 3.0 * reach.far[:, None] / scale)
    x, log_m = _grid(model, tau, scale, room, top)
    slope = (log_m[:, -1] - log_m[:, -2]) / (x[:, -1] - x[:, -2])
    short = (slope < reach.far) & (x[:, -1] < 0.999 * room[:, 0])
    if short.any():  # the saddle of the farthest strike lies beyond: X is all but bounded on that side
        top = np.where(short[:, None], top * _farther(model, tau, scale, room, top, reach.far), top)
        x, log_m = _grid(model, tau, scale, room, top)
    cliff = _cliff(x, log_m, reach.far)
    soft = cliff < room[:, 0]
    if soft.any():  # moments that exist but explode: the grid crowds there as towards an edge
        top = np.where(soft[:, None], np.maximum(top, _CROWDED * cliff[:, None] * scale), top)
        x, log_m = _grid(model, tau, scale, np.minimum(room, cliff[:, None]), top)
    log_x = np.log(x)
    log_1x = np.log1p(x)
    curvature = np.empty_like(x)
    curvature[:, 1:-1] = 2.0 * np.diff(np.diff(log_m, axis=1) / np.diff(x, axis=1), axis=1) / (x[:, 2:] - x[:, :-2])
    curvature[:, 0], curvature[:, -1] = curvature[:, 1], curvature[:, -2]
    variance = np.maximum(curvature, 0.0)
    return SideMoments(
        x=x,
        log_moment=log_m,
        saddle=log_m - log_x - log_1x,
        log_power=x * log_x - (1.0 + x) * log_1x,
        low=low[:, 0],
        high=high[:, 0],
        spread=0.5 * np.log(2.0 * np.pi * (variance + 1.0 / x**2 + 1.0 / (1.0 + x) ** 2)),
    )


def _grid(model: Model, tau: Floats, scale: Floats, room: Floats, top: Floats) -> tuple[Floats, Floats]:
    """Grids ``x`` and ``log M`` there, (2 S, POINTS): geometric up to ``top / scale``, crowding towards the edges."""
    lowest = _LOWEST * np.minimum(1.0, room * scale)
    g = np.exp(np.log(lowest) + np.linspace(0.0, 1.0, POINTS) * np.log(top / lowest)) / scale
    x = 1.0 / (1.0 / g + 1.0 / room)
    return x, _by_side(model, tau, x)


def _cliff(x: Floats, log_m: Floats, far: Floats) -> Floats:
    """The first grid point past the farthest strike's saddle to which ``log M`` jumps by more than ``_JUMP``, (2 S,);
    inf if none."""
    with np.errstate(invalid="ignore"):
        jump = np.diff(log_m, axis=1)
        level = log_m[:, 1:] - x[:, 1:] * np.maximum(far, 0.0)[:, None]
        steep = ((jump > _JUMP) | np.isnan(jump)) & ~(level <= 0.0)
    return np.where(steep.any(axis=1), x[np.arange(x.shape[0]), 1 + np.argmax(steep, axis=1)], np.inf)


def _by_side(model: Model, tau: Floats, x: Floats) -> Floats:
    """``log M`` at ``1 + x`` for the call sides and ``-x`` for the put sides: shape of ``x``, (2 S, m)."""
    count, points = tau.shape[0], x.shape[1]
    found = model.log_moment(np.concatenate([1.0 + x[:count], -x[count:]], axis=1), tau)
    return np.concatenate([found[:, :points], found[:, points:]])


def _farther(model: Model, tau: Floats, scale: Floats, room: Floats, top: Floats, far: Floats) -> Floats:
    """By what power of four the top must grow until the slope of ``log M`` passes the farthest strike, (2 S, 1)."""
    powers = 4.0 ** np.arange(_QUADRUPLINGS + 1)
    x = 1.0 / (scale / (top * powers) + 1.0 / room)
    log_m = _by_side(model, tau, x)
    slope = np.diff(log_m, axis=1) / np.maximum(np.diff(x, axis=1), 1e-300)
    enough = (slope >= far[:, None]) | (log_m[:, 1:] - x[:, 1:] * far[:, None] < NOTHING)
    at = np.where(enough.any(axis=1), np.minimum(np.argmax(enough, axis=1) + 2, _QUADRUPLINGS), _QUADRUPLINGS)
    return np.asarray(powers[at][:, None])
