"""What a straight contour leaves out, bounded: tails among the aliases and the nodes beyond the last one.

Both before the strike factor ``exp((shift - p) k)`` and in units of ``exp(log_scale)``, ``log_scale = log M(p)``, per
row.

Tails. A vanilla or a digital obeys Markov's inequality, ``W(k) <= c(x) M(p') exp((shift - p') k)`` with ``c = 1`` for
digitals, so the aliases to the right are at most, for any ``p' = 1 + x > p``,

    c(x) M(p') exp(-(p' - p) (k_low + L)) / (1 - exp(-(p' - p) L))

and to the left the mirror image. A density or a derivative by a parameter has no such inequality, but shifting its
contour gives ``|W(k)| <= exp((shift - p') k) I(p')`` with ``I(p') = 1/pi int |psi(u - i p')| du``, which takes the
place of ``c M``. ``I`` is summed on a geometric mesh by the larger end of each cell and doubled: conservative, not
proven.

Truncation. ``1/pi int_U^inf G(u) u^-power du`` with the model's non-increasing envelope ``G >= |phi|``, by steps on a
geometric mesh; the omitted terms of a trapezoidal sum of non-increasing terms lie below the integral from the last
node. Past the mesh the last ratio is continued, since envelopes steepen in log-log. Derivatives by parameters are
taken to grow at most like ``(u / U)^growth`` from twice their modulus at the last node: conservative, not proven.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from engine.arrays import Floats, Ints
from engine.protocols import Model
from engine.transform.kernels import Kernel
from engine.transform.moments import SideMoments
from engine.transform.plan import Plan

__all__ = ["alias_bounds", "log_moduli", "truncation_bounds"]

_MESH = np.concatenate([1.12 ** np.arange(9), 1.12**8 * 2.0 ** np.arange(1, 13)])
_TAIL_MESH = 0.05 * 1.5 ** np.arange(32)  # in units of 1/s, up to 1.4e4 / s


def alias_bounds(model: Model, tau: Floats, plan: Plan, rows: Ints, kernels: list[Kernel], log_scale: Floats) -> Floats:
    """Bounds (K, r) for the given rows. ``model`` and ``tau`` (r, 1) are those of the rows."""
    out = np.zeros((len(kernels), rows.shape[0]))
    shifted = [i for i, kernel in enumerate(kernels) if not kernel.markov]
    p = plan.exponent[rows][:, None]
    period = plan.period[rows][:, None]
    moments: SideMoments = plan.moments
    count = moments.x.shape[0] // 2
    at = np.arange(rows.shape[0])
    for right, edge in ((True, plan.k_low[rows]), (False, -plan.k_high[rows])):
        side = plan.slice_of[rows] if right else plan.slice_of[rows] + count
        x = moments.x[side]
        gap = 1.0 + x - p if right else x + p
        safe = np.maximum(gap, 1e-300)
        reach = -safe * (edge[:, None] + period) - np.log(-np.expm1(-safe * period))
        level = np.where(gap > 0.0, moments.log_moment[side] + reach, np.inf) - log_scale[:, None]
        digital = np.exp(level.min(axis=1))
        vanilla = np.exp((level + moments.log_power[side]).min(axis=1))
        for i, kernel in enumerate(kernels):
            if kernel.markov:
                out[i] += vanilla if kernel.order == 2 else digital
        if shifted:
            best = np.argmin(level, axis=1)
            order = 1.0 + x[at, best] if right else -x[at, best]
            weight = _line_weights(model, tau, order, [kernels[i] for i in shifted], log_scale)
            out[shifted] += weight * np.exp(reach[at, best])
    return out


def _line_weights(model: Model, tau: Floats, order: Floats, kernels: list[Kernel], log_scale: Floats) -> Floats:
    """``I(p')`` of every kernel, (K, r), at the moment orders (r,)."""
    scale = np.sqrt(np.reshape(model.mean_variance(tau), (-1, 1)))
    u = _TAIL_MESH / scale
    z = u - 1j * order[:, None]
    modulus = np.exp(log_moduli(model, z, tau, kernels) - log_scale[:, None])
    cells = np.diff(u, axis=1, prepend=0.0)
    largest = np.maximum(modulus, np.concatenate([modulus[..., :1], modulus[..., :-1]], axis=-1))
    return np.asarray(2.0 / np.pi * np.sum(largest * cells, axis=-1))


def log_moduli(model: Model, z: Any, tau: Any, kernels: list[Kernel], *, along_path: bool = False) -> Floats:
    """``log |psi|`` of every kernel at ``z``: shape (K,) + that of ``z``."""
    iz = 1j * z
    gradient: Any = None
    if any(kernel.parameter is not None for kernel in kernels):
        found = model.log_cf_gradient(z, tau, along_path=along_path)
        log_phi, gradient = found.log_value, found.gradient
    else:
        log_phi = model.log_cf(z, tau, along_path=along_path)
    out = np.empty((len(kernels), *z.shape))
    with np.errstate(divide="ignore"):
        for i, kernel in enumerate(kernels):
            out[i] = log_phi.real + np.log(np.abs(kernel.factor(iz)))
            if kernel.parameter is not None:
                out[i] += np.log(np.abs(gradient[kernel.parameter]))
    return out


def truncation_bounds(
    model: Model, tau: Floats, exponent: Floats, last: Floats, kernels: list[Kernel], gradient_at_last: Floats,
    log_scale: Floats,
) -> Floats:  # fmt: skip
    """Bounds (K, r). ``last``: ``U`` (r,); ``gradient_at_last`` (K, r): moduli of the derivatives there, 1 for none."""
    u = last[:, None] * _MESH
    envelope = np.exp(model.log_envelope(exponent[:, None], u, tau) - log_scale[:, None])
    by_power: dict[int, Floats] = {}
    for power in {kernel.power for kernel in kernels}:
        cell = _cells(power)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(envelope[:, -1] > 0.0, envelope[:, -1] / envelope[:, -2] * 2.0 ** (1 - power), 0.0)
            rest = np.where(ratio < 1.0, envelope[:, -1] * cell[-1] * 2.0 ** (1 - power) / (1.0 - ratio), np.inf)
        by_power[power] = (envelope[:, :-1] @ cell + rest) * last ** (1 - power) / np.pi
    out = np.empty((len(kernels), last.shape[0]))
    for i, kernel in enumerate(kernels):
        growth = 1.0 if kernel.parameter is None else 2.0 * gradient_at_last[i] * last ** (kernel.power - kernel.order)
        out[i] = by_power[kernel.power] * growth
    return out


def _cells(power: int) -> Floats:
    """Integrals of ``u^-power`` over the cells of the mesh, for ``U = 1``."""
    if power == 1:
        return np.diff(np.log(_MESH))
    exponent = 1 - power
    return np.asarray(np.diff(_MESH**exponent) / exponent)
