"""The moment strip of a square-root variance factor, by the closed explosion time.

Problem: the edges ``p_lo < 0``, ``p_hi > 1`` beyond which ``E[exp(p X)]`` is infinite at time ``tau``.

Explosion time (Andersen and Piterbarg 2007, proposition 3.1, from memory), with ``chi = rho sigma p - kappa``,
``Delta = chi^2 - sigma^2 (p^2 - p)``: infinite if ``Delta >= 0`` and ``chi < 0``;
``2 atanh(sqrt(Delta)/chi)/sqrt(Delta)`` if ``Delta >= 0`` and ``chi > 0``; ``2 atan2(beta, chi)/beta`` with
``beta = sqrt(-Delta)`` otherwise. Its reciprocal is continuous and monotone beyond [0, 1], so a bracketing root
search cannot fail; the inner end of the last bracket is returned. The lower edge is the upper one under the share
measure: ``p -> 1 - p``, ``kappa -> kappa - rho sigma``, ``rho -> -rho``.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from engine.arrays import Floats

__all__ = ["explosion_edges"]

_NEAREST, _FARTHEST = float(np.log(1e-9)), float(np.log(1e12))  # of an edge from 0 or 1, in the logarithm
_NONE = 1e-100  # the distance given where an edge is nearer than that: no row can use it
_MESH = 33  # points of a mesh: three of them narrow a bracket from 48 to 0.0015 in the logarithm


def explosion_edges(*, kappa: Any, sigma: Any, rho: Any, tau: Any, precise: bool = False) -> tuple[Floats, Floats]:
    """Edges ``(p_lo, p_hi)``: where the explosion time equals ``tau``, from inside.

    Parameters broadcast. Accuracy, relative to the distance from 0 or 1: 1e-3, or 1e-13 if ``precise``; beyond 1e12 an
    edge counts as infinite, within 1e-9 as not there at all.
    """
    kappa, sigma, rho, tau = np.broadcast_arrays(*np.atleast_1d(kappa, sigma, rho, tau))
    shape = kappa.shape
    sides = [
        np.concatenate([np.ravel(a), np.ravel(b)])[:, None]
        for a, b in ((kappa, kappa - rho * sigma), (sigma, sigma), (rho, -rho), (tau, tau))
    ]
    distance = _distance(sides[0], sides[1], sides[2], sides[3], precise)
    half = distance.shape[0] // 2
    return -distance[half:].reshape(shape), 1.0 + distance[:half].reshape(shape)


def _distance(kappa: Floats, sigma: Floats, rho: Floats, tau: Floats, precise: bool) -> Floats:
    """Distance of the upper edge from 1, from below; columns in, vector out."""
    rate = 1.0 / tau
    lo = np.full(tau.shape, _NEAREST)
    width = _FARTHEST - _NEAREST
    mesh = np.linspace(0.0, 1.0, _MESH)
    at = np.arange(tau.shape[0])
    f_lo = f_hi = np.zeros(0)
    for round_ in range(3):
        t = lo + width * mesh
        f = _explosion_rate(1.0 + np.exp(t), kappa, sigma, rho) - rate
        inside = np.sum(f < 0.0, axis=1)
        if round_ == 0:
            infinite, none = inside == _MESH, inside == 0
        cell = np.clip(inside - 1, 0, _MESH - 2)
        lo = t[at, cell][:, None]
        width = width / (_MESH - 1)
        f_lo, f_hi = f[at, cell], f[at, cell + 1]
    low = lo[:, 0]
    if precise:
        low = _narrow(low, low + width, f_lo, f_hi, kappa[:, 0], sigma[:, 0], rho[:, 0], rate[:, 0])
    edge = np.exp(low) * (1.0 - 4e-15)
    return np.where(infinite, np.inf, np.where(none, _NONE, edge))


def _narrow(
    lo: Floats, hi: Floats, f_lo: Floats, f_hi: Floats, kappa: Floats, sigma: Floats, rho: Floats, rate: Floats
) -> Floats:
    """False position with the Illinois weight on narrow brackets; returns their inner ends."""
    previous = np.zeros(lo.shape)
    for _ in range(40):
        width = hi - lo
        if np.all(width <= 4e-14):
            break
        with np.errstate(divide="ignore", invalid="ignore"):
            t = hi - f_hi * width / (f_hi - f_lo)
        nudge = np.minimum(2e-14, 0.25 * width)  # a step past the root closes the bracket from the other side
        t = np.where((t > lo) & (t < hi), t, lo + 0.5 * width)
        t = np.where(width < 1e-4, np.where(previous < 0.0, t + nudge, t - nudge), t)
        t = np.clip(t, lo + nudge, hi - nudge)
        f = _explosion_rate(1.0 + np.exp(t), kappa, sigma, rho) - rate
        inner = f < 0.0
        f_hi = np.where(inner, np.where(previous < 0.0, 0.5 * f_hi, f_hi), f)
        f_lo = np.where(inner, f, np.where(previous > 0.0, 0.5 * f_lo, f_lo))
        lo, hi = np.where(inner, t, lo), np.where(inner, hi, t)
        previous = np.where(inner, -1.0, 1.0)
    return lo


def _explosion_rate(p: Any, kappa: Any, sigma: Any, rho: Any) -> Any:
    """``1 / T*(p)``, zero where the moment never explodes."""
    chi = rho * sigma * p - kappa
    delta = kappa * kappa + sigma * p * ((sigma - 2.0 * kappa * rho) - sigma * ((1.0 - rho) * (1.0 + rho)) * p)
    root = np.sqrt(np.abs(delta))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        angle = np.arctan2(root, chi)
        real = np.arctanh(np.minimum(root / np.maximum(chi, 1e-300), 1.0 - 1e-16))
        level = 0.5 * root / np.where(delta < 0.0, angle, real)
    level = np.where((delta >= 0.0) & (chi <= 0.0), 0.0, level)
    return np.where((root == 0.0) & (chi > 0.0), 0.5 * chi, level)
