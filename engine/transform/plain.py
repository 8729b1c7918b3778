"""Rows on straight contours: characteristic function at the nodes, one FFT, a local sum at the strikes.

``value(k) = exp((shift - p) k) (h / pi) Re sum' psi_j exp(-i u_j k) - exact aliases``, ``h = 2 pi / L``, and

    bound = aliasing (moments) + truncation (envelope) + rounding (the sum's own terms)

Truncation: ``(1/pi) int_U^inf G(u) u^-power du`` with the non-increasing envelope ``G``, bounded from above by steps on
a geometric mesh; the omitted terms of a trapezoidal sum of non-increasing terms are below the integral from the last
node. Rounding: every ``psi_j`` carries ``(size_j + 8) eps`` relative, the window its own error and each strike the
rounding of ``u_j k``.
"""

from __future__ import annotations

import numpy as np

from engine.arrays import Floats, Ints
from engine.protocols import Model
from engine.transform.contours import Contours
from engine.transform.kernels import Kernel
from engine.transform.moments import SideMoments
from engine.transform.record import EPS, RowValues, assemble
from engine.transform.window import WINDOW_ERROR, inverse_window, sum_at_points

__all__ = ["alias_bound", "plain_rows", "truncation_bound"]

_MESH = 1.12 ** np.arange(9)
_DOUBLINGS = 2.0 ** np.arange(1, 31)


def plain_rows(
    model: Model, tau: Floats, contours: Contours, kernels: list[Kernel], *, row: Ints, k: Floats, growth: Floats
) -> list[RowValues]:
    """Values of every kernel at strikes ``k`` (n,) on the contours ``row`` (n,). ``model`` stacked like the contours.

    All contours have the same number of nodes. ``growth``: ``exp(k)``. Returns one RowValues per kernel.
    """
    nodes = int(contours.nodes[0])
    p = contours.exponent[:, None]
    h = 2.0 * np.pi / contours.period
    u = h[:, None] * np.arange(nodes)
    z = u - 1j * p
    log_phi, size = model.log_cf_sized(z, tau)
    log_scale = np.ascontiguousarray(log_phi[:, 0].real)
    phi = np.exp(log_phi - log_scale[:, None])
    size += 8.0
    iz = p + 1j * u
    inverse = inverse_window(nodes)
    position = -k / contours.period[row]
    step = h / np.pi
    out = []
    for kernel in kernels:
        psi = phi * kernel.factor(iz)
        modulus = np.abs(psi)
        spread = (modulus @ inverse) / inverse[0]
        rounding = step * (EPS * np.einsum("ij,ij->i", modulus, size) + (WINDOW_ERROR + 4.0 * EPS) * spread)
        slope = step * np.einsum("ij,ij->i", modulus, u)
        psi *= inverse
        total = step[row] * sum_at_points(psi, row, position)
        pieces = alias_bound(contours, kernel) + truncation_bound(model, tau, contours, kernel)
        out.append(
            assemble(
                total=total,
                log_scale=log_scale[row],
                rounding=rounding[row],
                slope=slope[row],
                pieces=pieces[row],
                k=k,
                shifted=(kernel.shift - contours.exponent[row]) * k,
                aliases=kernel.exact_aliases(contours.exponent[row], contours.period[row], growth),
            )
        )
    return out


def alias_bound(contours: Contours, kernel: Kernel) -> Floats:
    """Bound on the tails that remain among the aliases, before the strike factor. Shape (rows,).

    Right: ``min_x c(x) M(1 + x) exp(-(1 + x - p)(k_low + L)) / (1 - exp(-(1 + x - p) L))``, left its mirror image.
    """
    moments: SideMoments = contours.moments
    count = moments.x.shape[0] // 2
    p = contours.exponent[:, None]
    period = contours.period[:, None]
    total = np.zeros(contours.exponent.shape)
    for side, right, edge in (
        (contours.slice_of, True, contours.k_low),
        (contours.slice_of + count, False, -contours.k_high),
    ):
        x = moments.x[side]
        gap = 1.0 + x - p if right else x + p
        safe = np.maximum(gap, 1e-300)
        log_c = moments.log_power[side] if kernel.capped else 0.0
        level = log_c + moments.log_moment[side] - safe * (edge[:, None] + period) - np.log(-np.expm1(-safe * period))
        total += np.exp(np.min(np.where(gap > 0.0, level, np.inf), axis=1))
    return total


def truncation_bound(model: Model, tau: Floats, contours: Contours, kernel: Kernel) -> Floats:
    """Bound on what the nodes beyond the last one would add, before the strike factor. Shape (rows,)."""
    last = 2.0 * np.pi / contours.period * (contours.nodes - 1)
    mesh = _MESH if kernel.power == 2 else np.concatenate([_MESH, _MESH[-1] * _DOUBLINGS])
    u = last[:, None] * mesh
    envelope = np.exp(model.log_envelope(contours.exponent[:, None], u, tau))
    if kernel.power == 2:
        ends = np.append(1.0 / mesh, 0.0)
        return np.asarray(envelope @ (ends[:-1] - ends[1:]) / (np.pi * last))
    steps = np.diff(np.log(mesh))
    rest = np.where(envelope[:, -1] > 0.0, np.inf, 0.0)
    return np.asarray(envelope[:, :-1] @ steps / np.pi + rest)
