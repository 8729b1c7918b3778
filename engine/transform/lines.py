"""Rows on straight contours: characteristic function at the nodes, every kernel through one FFT.

``W(k) = exp((shift - p) k) (h / pi) Re sum' psi_j exp(-i u_j k) - exact aliases``, ``h = 2 pi / L``. The result of
the FFT, a real grid over one period, is what strikes are later summed from (``engine.transform.window``). Rounding:
every ``psi_j`` carries ``(size_j + 8) eps`` relative and, with a derivative, the derivative's own; the window adds
its error. ``phi`` is scaled by its value at ``u = 0``, so that no exponent leaves the double range.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import EPS, Floats, Ints
from engine.protocols import Model
from engine.transform.kernels import Kernel
from engine.transform.plan import Plan
from engine.transform.samples import sample
from engine.transform.window import WINDOW_ERROR, grid_of, inverse_window

__all__ = ["LineSums", "line_sums"]


@dataclass(frozen=True, slots=True)
class LineSums:
    """``grid`` (K, r, points) in units of ``exp(log_scale)`` (r,); ``rounding`` and ``slope`` (change per unit of
    ``k``) in the same units, and ``last``, the moduli of the derivatives at the last node (1 for none); (K, r) each."""

    grid: Floats
    log_scale: Floats
    rounding: Floats
    slope: Floats
    last: Floats


def line_sums(model: Model, tau: Floats, plan: Plan, rows: Ints, kernels: list[Kernel], *, nodes: int) -> LineSums:
    """The given rows of the plan with ``nodes`` nodes each. ``model`` and ``tau`` (r, 1) are those of the rows."""
    p = plan.exponent[rows][:, None]
    h = 2.0 * np.pi / plan.period[rows]
    u = h[:, None] * np.arange(nodes)
    iz = p + 1j * u
    z = u - 1j * p
    found = sample(model, z, tau, kernels)
    log_phi, size = found.log_phi, found.size
    log_scale = log_phi[:, 0].real.copy()
    log_phi -= log_scale[:, None]
    phi = np.exp(log_phi)
    phi *= (h / np.pi)[:, None]
    size = size + 8.0
    inverse = inverse_window(nodes)
    psi = np.empty((len(kernels), *z.shape), dtype=np.complex128)
    rounding = np.empty((len(kernels), rows.shape[0]))
    slope = np.empty_like(rounding)
    last = np.ones_like(rounding)
    for i, kernel in enumerate(kernels):
        base = phi * kernel.factor(iz)
        modulus = np.abs(base)
        if kernel.parameter is None:
            lost = np.einsum("ij,ij->i", modulus, size)
        else:
            g = found.gradient[kernel.parameter]
            g_modulus = np.abs(g)
            last[i] = g_modulus[:, -1]
            lost = np.einsum("ij,ij->i", modulus, size * g_modulus + found.gradient_size[kernel.parameter])
            base *= g
            modulus *= g_modulus
        spread = (modulus @ inverse) / inverse[0]
        rounding[i] = EPS * lost + (WINDOW_ERROR + 4.0 * EPS) * spread
        slope[i] = np.einsum("ij,ij->i", modulus, u)
        np.multiply(base, inverse, out=psi[i])
    return LineSums(grid_of(psi), log_scale, rounding, slope, last)
