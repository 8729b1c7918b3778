"""What the engine is timed against: its floor, the direct sum over its own nodes, and two textbook methods.

The textbook methods stand apart from the engine: they have a characteristic function of their own, in the form with the
decaying exponential (Albrecher, Mayer, Schoutens and Tistaert 2007, "The little Heston trap", from memory).
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.integrate import quad
from scipy.interpolate import CubicSpline

from engine import Slice
from engine.protocols import Model
from engine.transform.inversion import _at_strikes
from engine.transform.kernels import VANILLA
from engine.transform.plan import Plan, plan_rows
from engine.transform.reach import Strikes, reach_of
from engine.transform.rows import Rows, evaluate

__all__ = ["Planned", "damped_fft", "planned", "quad_prices"]


@dataclass(frozen=True, slots=True)
class Planned:
    """A batch laid out for the transform with its plan: the engine's own steps, and what they are compared with."""

    model: Model  # stacked
    tau: np.ndarray  # (S, 1)
    strikes: Strikes
    plan: Plan
    rows: Rows
    slices: list[Slice]

    def evaluated(self) -> np.ndarray:
        """The engine from its plan on: rows evaluated and summed at the strikes, values per unit forward."""
        with np.errstate(all="ignore"):
            rows = evaluate(self.model, self.tau, self.plan, [VANILLA])
            return _at_strikes(rows, self.strikes, [VANILLA])[0][0]

    def floor(self) -> Callable[[], object]:
        """Characteristic function at the nodes used, and one FFT of that length for each row; nothing else.

        Rows with the same nodes go together as far as the engine puts them together, 8,192 nodes at a time.
        """
        work = []
        for count in np.unique(self.rows.nodes[self.rows.length > 0]).tolist():
            alike = np.flatnonzero((self.rows.nodes == count) & (self.rows.length > 0))
            step = max(1, (1 << 13) // count)
            for start in range(0, alike.shape[0], step):
                at = alike[start : start + step]
                owner = self.plan.slice_of[at]
                work.append((self._nodes(at, count), self.model.take(owner), self.tau[owner]))

        def run() -> object:
            return [fft.fft(np.exp(model.log_cf(z, tau)), axis=-1) for z, model, tau in work]

        return run

    def direct(self, slices: list[int]) -> np.ndarray:
        """The trigonometric sum term by term at every strike, at the nodes and exponents of the engine, so equally
        accurate; the characteristic function is part of it. Values of the given slices per unit forward."""
        return np.concatenate([self._direct_slice(s) for s in slices])

    def _nodes(self, rows: np.ndarray, count: int) -> np.ndarray:
        h = 2.0 * np.pi / self.rows.period[rows]
        return h[:, None] * np.arange(count) - 1j * self.rows.exponent[rows][:, None]

    def _direct_slice(self, s: int) -> np.ndarray:
        rows, own = self.rows, self.strikes.slice_of == s
        k, side = self.strikes.k[own], self.strikes.side_of[own]
        row = rows.base[side] + (np.abs(k)[:, None] < rows.cuts[side]).sum(axis=1)
        out = np.empty(k.shape)
        one, tau = self.model.take(np.array([s])), self.tau[s : s + 1]
        for r in np.unique(row).tolist():
            if rows.length[r] == 0:
                raise ValueError("a bent row is summed directly by the engine itself")
            here = row == r
            p, z = float(rows.exponent[r]), self._nodes(np.array([r]), int(rows.nodes[r]))[0]
            psi = np.exp(one.log_cf(z[None, :], tau)[0]) / (1j * z * (1j * z - 1.0))
            psi[0] *= 0.5
            total = (np.exp(-1j * np.outer(k[here], z.real)) @ psi).real * (2.0 / rows.period[r])
            flat, growing = rows.aliases[:2, 0, r]
            value = np.exp((1.0 - p) * k[here]) * total - flat - growing * np.exp(k[here])
            out[here] = value + (np.minimum(1.0, np.exp(k[here])) if rows.middle[r] else 0.0)
        return out


def planned(models: list[Model], slices: list[Slice], *, tolerance: float) -> Planned:
    """Plan a batch as the engine does, all slices together."""
    stacked = type(models[0]).stack(models)
    tau = np.array([[one.expiry] for one in slices])
    lengths = np.array([one.strikes.shape[0] for one in slices])
    k = np.concatenate([np.log(one.strikes / one.forward) for one in slices])
    strikes = Strikes(k, np.arange(len(slices)).repeat(lengths), lengths.cumsum() - lengths)
    with np.errstate(all="ignore"):
        reach = reach_of(strikes, np.sqrt(stacked.mean_variance(tau)).reshape(-1))
        plan = plan_rows(stacked, tau, reach, tolerance=tolerance, power=VANILLA.power)
        rows = evaluate(stacked, tau, plan, [VANILLA])
    return Planned(stacked, tau, strikes, plan, rows, slices)


def quad_prices(parameters: dict[str, float], one: Slice, at: list[int], **settings: float) -> np.ndarray:
    """Out-of-the-money prices by the two probabilities, an adaptive integral each (S. Heston 1993): ``C = D (F P1 - K
    P2)``, ``P_j = 1/2 + 1/pi int_0^inf Re[exp(-i u k) f_j(u) / (i u)] du``. ``settings`` go to ``quad``."""
    phi = _scalar_cf(tau=one.expiry, **parameters)
    out = np.empty(len(at))
    for i, strike in enumerate(one.strikes[at].tolist()):
        k = math.log(strike / one.forward)

        def first(u: float, k: float = k) -> float:
            return (cmath.exp(-1j * u * k) * phi(complex(u, -1.0)) / (1j * u)).real

        def second(u: float, k: float = k) -> float:
            return (cmath.exp(-1j * u * k) * phi(complex(u, 0.0)) / (1j * u)).real

        p1, p2 = (0.5 + quad(f, 0.0, np.inf, limit=500, **settings)[0] / math.pi for f in (first, second))
        call = one.forward * p1 - strike * p2
        out[i] = one.discount_factor * (call if strike >= one.forward else call - one.forward + strike)
    return out


def _scalar_cf(
    *, tau: float, v0: float, kappa: float, theta: float, sigma: float, rho: float
) -> Callable[[complex], complex]:
    """``E[exp(i z X)]`` at one point, on the complex functions of the standard library."""

    def phi(z: complex) -> complex:
        b = kappa - rho * sigma * 1j * z
        d = cmath.sqrt(b * b + sigma * sigma * (z * z + 1j * z))
        g = (b - d) / (b + d)
        decay = cmath.exp(-d * tau)
        drift = (b - d) * tau - 2.0 * cmath.log((1.0 - g * decay) / (1.0 - g))
        level = (b - d) * (1.0 - decay) / (1.0 - g * decay)
        return cmath.exp((kappa * theta * drift + v0 * level) / (sigma * sigma))

    return phi


POINTS, ALPHA, ETA = 4096, 1.5, 0.25


def damped_fft(parameters: dict[str, float], one: Slice) -> np.ndarray:
    """Out-of-the-money prices by the damped FFT of P. Carr and D. Madan, "Option valuation using the fast Fourier
    transform", J. Comput. Finance 2(4), 1999: 4,096 points, damping 1.5, spacing 0.25, Simpson's weights; a cubic
    spline through the grid around the strikes."""
    v = ETA * np.arange(POINTS)
    spacing = 2.0 * np.pi / (POINTS * ETA)
    first = -0.5 * POINTS * spacing
    weight = np.where(np.arange(POINTS) % 2 == 1, 4.0, 2.0) * (ETA / 3.0)
    weight[0] = ETA / 3.0
    phi = _vector_cf(v - 1j * (ALPHA + 1.0), tau=one.expiry, **parameters)
    psi = phi / (ALPHA * ALPHA + ALPHA - v * v + 1j * (2.0 * ALPHA + 1.0) * v)
    transform = fft.fft(psi * np.exp(-1j * first * v) * weight)
    k = np.log(one.strikes / one.forward)
    low = int((k.min() - first) / spacing) - 4
    high = int((k.max() - first) / spacing) + 6
    grid = first + spacing * np.arange(low, high)
    spline = CubicSpline(grid, np.exp(-ALPHA * grid) / np.pi * transform.real[low:high])
    call = one.forward * spline(k)
    return one.discount_factor * np.where(k >= 0.0, call, call - one.forward + one.strikes)


def _vector_cf(
    z: np.ndarray, *, tau: float, v0: float, kappa: float, theta: float, sigma: float, rho: float
) -> np.ndarray:
    """``E[exp(i z X)]`` for an array."""
    b = kappa - rho * sigma * 1j * z
    d = np.sqrt(b * b + sigma * sigma * (z * z + 1j * z))
    g = (b - d) / (b + d)
    decay = np.exp(-d * tau)
    drift = (b - d) * tau - 2.0 * np.log((1.0 - g * decay) / (1.0 - g))
    level = (b - d) * (1.0 - decay) / (1.0 - g * decay)
    return np.exp((kappa * theta * drift + v0 * level) / (sigma * sigma))
