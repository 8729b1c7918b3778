"""Trigonometric sums at arbitrary points: one FFT and a short local sum (a type-2 non-uniform transform).

Problem: ``f(x_i) = Re[c_0 / 2 + sum_{j=1}^{N-1} c_j exp(i 2 pi j x_i / L)]`` for many rows of coefficients and ragged
points ``x_i``, to rounding of ``sum |c_j|``.

Method. With ``M = 4 N`` real grid values (twice the Nyquist number of a sum of N harmonics) and the window
``W(t) = exp(beta (sqrt(1 - t^2) - 1))`` on ``|t| < 1``, stretched to ``WIDTH`` grid cells:

    g_m = irfft_M(c_j / w_j),     f(x) = (M / 2) sum_m g_m W((x / dx - m) / (WIDTH / 2)),     w_j = Fourier coefficient

irfft counts ``c_0`` once and every other coefficient with its conjugate, so the half weight of the trapezoidal rule
comes for free and the whole sum stays in real arithmetic. The window's Fourier coefficients are integrals of a
smooth function, by Gauss-Legendre quadrature to rounding.

Source: A. Barnett, J. Magland, L. af Klinteberg, "A parallel nonuniform fast Fourier transform library based on an
'exponential of semicircle' kernel", SIAM J. Sci. Comput. 41(5), 2019 (from memory: beta = 2.30 WIDTH at twice the
Nyquist grid, error about exp(-pi WIDTH sqrt(1/2)) = 4e-16 at width 16).
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from scipy import fft

from engine.arrays import Complexes, Floats, Ints

__all__ = ["MARGIN", "OVERSAMPLING", "WINDOW_ERROR", "grid_length", "grid_of", "inverse_window", "sums_at"]

WIDTH = 16
BETA = 2.30 * WIDTH
OVERSAMPLING = 4
WINDOW_ERROR = 4e-15  # of sum |c_j| / w_j; largest seen 6e-16 in tests/unit/test_window.py, kept with a margin
MARGIN = WIDTH  # a point at the very end of a period reaches WIDTH / 2 beyond it
_OFFSETS = np.arange(WIDTH)
_BLOCK = 2048  # points per block: WIDTH x 2048 doubles stay in a second-level cache


def grid_length(nodes: int) -> int:
    """Length of the real grid for ``nodes`` coefficients: a multiple of 4 N, and long enough for the window."""
    return max(OVERSAMPLING * nodes, 2 * WIDTH)


@lru_cache(maxsize=256)
def inverse_window(nodes: int) -> Floats:
    """``M / (2 w_j)`` for ``j < nodes``: what the coefficients are multiplied by before the FFT. Shape (nodes,)."""
    x, weight = np.polynomial.legendre.leggauss(64)
    profile = weight * np.exp(BETA * (np.sqrt(1.0 - x * x) - 1.0))
    length = grid_length(nodes)
    angle = (np.pi * WIDTH / length) * np.arange(nodes)
    coefficient = 0.5 * WIDTH * (np.cos(np.outer(angle, x)) @ profile)
    out = 0.5 * length / coefficient
    out.setflags(write=False)
    return out


def grid_of(coefficients: Complexes) -> Floats:
    """One period of the real grid, from minus a half to a half, with ``MARGIN`` values repeated at either end. Shape
    (..., grid_length + 2 MARGIN).

    ``coefficients``: shape (..., N), already multiplied by ``inverse_window(N)``.
    """
    length = grid_length(coefficients.shape[-1])
    half = length // 2
    grid = fft.irfft(coefficients, n=length, axis=-1)
    return np.concatenate([grid[..., half - MARGIN :], grid[..., : half + MARGIN]], axis=-1)


def sums_at(grids: Floats, offset: Ints, length: Ints, position: Floats) -> Floats:
    """The sums at ``position`` (n,), in periods, any real number: shape (K, n).

    ``grids``: (K, total), rows of ``grid_of`` end to end; point ``i`` belongs to the row that starts at ``offset[i]``
    with ``length[i]`` points in its period. Error at most ``WINDOW_ERROR`` times the row's ``sum |c_j| / w_j`` (in
    the scale of ``f``).
    """
    out = np.empty((grids.shape[0], position.shape[0]))
    for start in range(0, position.shape[0], _BLOCK):
        part = slice(start, start + _BLOCK)
        weight, index = _window(offset[part], length[part], position[part])
        for k in range(grids.shape[0]):
            np.einsum("ij,ij->i", weight, grids[k][index], out=out[k, part])
    return out


def _window(offset: Ints, length: Ints, position: Floats) -> tuple[Floats, Ints]:
    """Weights and indices of the WIDTH neighbours of each point."""
    x = (position - np.rint(position)) * length  # exact for |position| < 1/2: a small k keeps its digits
    first = np.ceil(x - 0.5 * WIDTH)
    t = _OFFSETS + (first - x)[:, None]
    t *= 2.0 / WIDTH
    np.multiply(t, t, out=t)
    np.subtract(1.0, t, out=t)
    np.maximum(t, 0.0, out=t)  # the end point |t| = 1 may round to 1 + eps
    np.sqrt(t, out=t)
    t -= 1.0
    t *= BETA
    np.exp(t, out=t)
    return t, (first.astype(np.int64) + (offset + length // 2 + MARGIN))[:, None] + _OFFSETS
