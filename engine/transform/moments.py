"""What the moments of ``X`` say before any transform: values to expect, tails to bound, exponents to choose.

For each slice, ``log M(p)`` on two grids of real moment orders, ``p = 1 + x`` (calls) and ``p = -x`` (puts), ``x > 0``,
geometric in the middle and crowding towards the edges of the strip. Puts are calls under the share measure, so after
the reflection ``p -> 1 - p``, ``k -> -k`` both sides read alike; a *side* is one of the two.

    J(x, kr) = log M - log(x (1 + x)) - x kr               saddle function at reflected log-moneyness kr >= 0
    log V(kr) ~ min_x J - log(2 pi (s^2 + 1/x^2 + 1/(1+x)^2)) / 2      (Lord and Kahl 2007; an estimate, for planning)
    V(kr) <= c(x) M exp(-x kr),   c(x) = x^x / (1 + x)^(1 + x)          (Markov's inequality; a bound, for aliases)

The last line is ``(e^X - e^k)^+ <= c(x) e^{p X - (p - 1) k}``, tight where the power touches the payoff.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats, Ints
from engine.protocols import Model

__all__ = ["SideMoments", "side_moments"]

POINTS = 40
_LOWEST = 0.15  # of 1/s: below it the pole at x = 0 dominates every strike
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
    spread: Floats  # log(2 pi (s^2 + 1/x^2 + 1/(1+x)^2)) / 2

    def log_value(self, side: Ints, kr: Floats) -> Floats:
        """Estimated log of the out-of-the-money value per unit forward in the side's own measure. Shape of ``kr``."""
        level = self.saddle[side] - self.x[side] * kr[:, None]
        best = np.argmin(level, axis=1)
        at = np.arange(best.shape[0])
        return np.asarray(level[at, best] - self.spread[side, best])

    def loss(self, side: Ints, kr: Floats) -> Floats:
        """``J(x, kr) - min_x J(x, kr)`` for every grid point: units in the exponent lost there. Shape (n, POINTS)."""
        level = self.saddle[side] - self.x[side] * kr[:, None]
        return np.asarray(level - level.min(axis=1, keepdims=True))


def side_moments(model: Model, tau: Floats, farthest: Floats) -> SideMoments:
    """Moment grids of every slice. ``tau``: (S, 1); ``farthest``: (S,), the largest ``|k|`` asked of each slice."""
    s = np.sqrt(model.mean_variance(tau)).reshape(-1, 1)
    low, high = (np.reshape(edge, (-1, 1)) for edge in model.strip(tau))
    top = np.maximum(_HIGHEST, 3.0 * farthest[:, None] / s)
    ramp = np.linspace(0.0, 1.0, POINTS)
    g = np.exp(np.log(_LOWEST) + ramp * np.log(top / _LOWEST)) / s
    x_call = 1.0 / (1.0 / g + 1.0 / (high - 1.0))
    x_put = 1.0 / (1.0 / g - 1.0 / low)
    log_moment = model.log_moment(np.concatenate([1.0 + x_call, -x_put], axis=1), tau)
    x = np.concatenate([x_call, x_put])
    log_m = np.concatenate([log_moment[:, :POINTS], log_moment[:, POINTS:]])
    log_x = np.log(x)
    log_1x = np.log1p(x)
    both = np.concatenate([s, s])
    return SideMoments(
        x=x,
        log_moment=log_m,
        saddle=log_m - log_x - log_1x,
        log_power=x * log_x - (1.0 + x) * log_1x,
        low=low[:, 0],
        high=high[:, 0],
        spread=0.5 * np.log(2.0 * np.pi * (both**2 + 1.0 / x**2 + 1.0 / (1.0 + x) ** 2)),
    )
