"""Hard rows: the contour is bent into the sector where the integrand decays, and a hundred or so nodes suffice.

``z(y) = i w1 + b sinh(i w + y)`` crosses the imaginary axis at ``-i p`` (``w1 + b sin w = -p``) and leaves along rays of
angle ``w``. The characteristic functions served here are analytic off the imaginary axis (Lucic 2007 for Heston), so
the contour may be bent freely in the right half plane while it crosses the axis between the same singularities. It is
bent down (``w < 0``) for strikes above ``k_inf``, up for those below, where ``phi(z) ~ exp(i z k_inf)`` far out.

    V(k) = (1/pi) Re int_0^inf exp((shift - i z) k) phi(z) factor(i z) z'(y) dy

Trapezoidal rule with step ``h``; its error for a function analytic in ``|Im y| < d`` is at most
``(H+ + H-) / (exp(2 pi d / h) - 1)`` with ``H+-`` the integrals of the modulus along ``Im y = +-d`` (Trefethen and Weideman
2014, theorem 5.1). ``H+-`` are themselves computed by quadrature and doubled; the tail beyond the last node is the
integral of the modulus over it, doubled: conservative rather than proven, and said so. Moduli are log-convex in
``k``, so their largest value over a row's strikes is taken at its two ends.

Source: S. Boyarchenko and S. Levendorskii, "Sinh-acceleration: efficient evaluation of probability distributions,
option pricing, and Monte Carlo simulations", IJTAF 22(3), 2019; V. Lucic, "On singularities in the Heston model", 2007
(both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Floats, Ints
from engine.protocols import Model
from engine.transform.contours import Contours
from engine.transform.kernels import Kernel
from engine.transform.record import EPS, RowValues, assemble

__all__ = ["DeformedValues", "deformed_row"]

_PROBE_STEP = 0.2
_PROBE = _PROBE_STEP * np.arange(221)  # |z| up to exp(44) b
_CANDIDATES = ((0.8, 0.9), (0.8, 0.6), (0.55, 0.85), (0.55, 0.5), (0.3, 0.8), (0.3, 0.4))  # (share of angle, of gap)
_MOST_NODES = 2000
_STRIKE_BLOCK = 256


@dataclass(frozen=True, slots=True)
class _Bend:
    """One trial contour: its shape, the step it needs and where it may stop."""

    w1: float
    b: float
    w: float
    d: float
    hardy: float  # H+ + H- over pi, scaled by exp(-log M(p)) and the strike factor
    stop: float
    cost: float


@dataclass(frozen=True, slots=True)
class DeformedValues:
    """Values per kernel, and the nodes used."""

    values: list[RowValues]
    nodes: int


def deformed_row(
    model: Model, tau: float, contours: Contours, at: int, kernels: list[Kernel], *, k: Floats
) -> DeformedValues:
    """Values at strikes ``k`` (n,) of row ``at``. ``model`` holds that row's parameters alone, as floats or (1, 1)."""
    p = float(contours.exponent[at])
    k_inf, limit = model.bend(tau)
    down = k >= k_inf
    value = [np.empty(k.shape) for _ in kernels]
    bound = [np.empty(k.shape) for _ in kernels]
    nodes = 0
    for part, sign in ((down, -1.0), (~down, 1.0)):
        if not np.any(part):
            continue
        side = k[part]
        target = float(contours.log_target[at])
        bend = _choose(model, tau, contours, at, kernels, sign, limit, float(side.min()), float(side.max()), target)
        rows, used = _sum(model, tau, p, bend, kernels, side, target)
        nodes += used
        for i, r in enumerate(rows):
            value[i][part] = r.value
            bound[i][part] = r.bound
    return DeformedValues([RowValues(v, e) for v, e in zip(value, bound, strict=True)], nodes)


def _line(bend_w1: float, b: float, angle: float, y: Floats) -> tuple[Any, Any]:
    """``z`` and ``dz/dy`` on the line ``Im y`` that turns the angle into ``angle``."""
    arg = y + 1j * angle
    return 1j * bend_w1 + b * np.sinh(arg), b * np.cosh(arg)


def _log_modulus(
    model: Model, tau: float, kernels: list[Kernel], z: Any, dz: Any, p: float, k_low: float, k_high: float
) -> Floats:
    """Log of the largest integrand modulus over kernels and row ends, the strike factor ``exp((shift-p)k)`` apart."""
    iz = 1j * z
    with np.errstate(over="ignore", invalid="ignore"):
        log_phi = model.log_cf(z[None, :], tau, along_path=True)[0].real
    lift = z.imag + p
    factor = np.max([np.abs(kernel.factor(iz)) for kernel in kernels], axis=0)
    level = log_phi + np.maximum(lift * k_low, lift * k_high) + np.log(factor * np.abs(dz))
    return np.where(np.isnan(level), np.inf, level)


def _choose(
    model: Model,
    tau: float,
    contours: Contours,
    at: int,
    kernels: list[Kernel],
    sign: float,
    limit: float,
    k_low: float,
    k_high: float,
    target: float,
) -> _Bend:
    """The cheapest of a few bends: by the step its analyticity allows and the length its decay needs."""
    p = float(contours.exponent[at])
    lower, upper = _gap(contours, at)
    best: _Bend | None = None
    for share, fill in _CANDIDATES:
        w = sign * 0.5 * share * limit
        d = 0.47 * share * limit
        up = np.sin(w + d) - np.sin(w)
        down = np.sin(w) - np.sin(w - d)
        b = fill * min((p - lower) / up, (upper - p) / down)
        w1 = -p - b * np.sin(w)
        hardy = 0.0
        for angle in (w + d, w - d):
            z, dz = _line(w1, b, angle, _PROBE)
            level = _log_modulus(model, tau, kernels, z, dz, p, k_low, k_high)
            with np.errstate(over="ignore"):
                hardy += 2.0 * _PROBE_STEP * float(np.sum(np.exp(level))) / np.pi
        z, dz = _line(w1, b, w, _PROBE)
        level = _log_modulus(model, tau, kernels, z, dz, p, k_low, k_high)
        with np.errstate(over="ignore"):
            weight = np.exp(level) * (2.0 * _PROBE_STEP / np.pi)
        tail = np.cumsum(weight[::-1])[::-1]
        small = np.flatnonzero(tail <= np.exp(target))
        stop = float(_PROBE[small[0]]) if small.size else float(_PROBE[-1])
        decades = np.log(hardy) - target if np.isfinite(hardy) else np.inf
        cost = stop * max(decades, 1.0) / d
        if best is None or cost < best.cost:
            best = _Bend(w1, b, w, d, hardy, stop, cost)
    assert best is not None
    return best


def _gap(contours: Contours, at: int) -> tuple[float, float]:
    """The singularities on either side of ``-i p`` on the imaginary axis, as moment orders."""
    p = float(contours.exponent[at])
    slice_of = contours.slice_of[at]
    if p > 1.0:
        return 1.0, float(contours.moments.high[slice_of])
    return (float(contours.moments.low[slice_of]), 0.0) if p < 0.0 else (0.0, 1.0)


def _sum(
    model: Model, tau: float, p: float, bend: _Bend, kernels: list[Kernel], k: Floats, target: float
) -> tuple[list[RowValues], int]:
    """The trapezoidal sum on the chosen contour, direct over the strikes."""
    decades = max(float(np.log(bend.hardy)) - target, 1.0) if np.isfinite(bend.hardy) else 60.0
    h = 2.0 * np.pi * bend.d / decades
    count = min(int(np.ceil(bend.stop / h)) + 2, _MOST_NODES)
    h = max(h, bend.stop / (count - 2))
    y = h * np.arange(count)
    z, dz = _line(bend.w1, bend.b, bend.w, y)
    log_phi, size = model.log_cf_sized(z[None, :], tau, along_path=True)
    log_scale = float(log_phi[0, 0].real)
    base = np.exp(log_phi[0] - log_scale) * dz * (h / np.pi)
    base[0] *= 0.5
    with np.errstate(over="ignore"):
        discretisation = bend.hardy / np.expm1(min(2.0 * np.pi * bend.d / h, 700.0))
    k_low, k_high = float(k.min()), float(k.max())
    lift = z.imag + p
    largest = np.exp(np.maximum(lift * k_low, lift * k_high))
    iz = 1j * z
    out = []
    for kernel in kernels:
        psi = base * kernel.factor(iz)
        modulus = np.abs(psi) * largest
        rounding = EPS * float(modulus @ (size[0] + 8.0 + 0.5 * np.log2(count)))
        slope = float(modulus @ np.abs(z))
        tail = _tail(modulus, bend, h) * np.exp(log_scale)
        total = np.empty(k.shape)
        for start in range(0, k.shape[0], _STRIKE_BLOCK):
            block = slice(start, start + _STRIKE_BLOCK)
            total[block] = (np.exp(np.multiply.outer(k[block], p - iz)) @ psi).real
        fill = np.ones(k.shape)
        out.append(
            assemble(
                total=total,
                log_scale=log_scale * fill,
                rounding=rounding * fill,
                slope=slope * fill,
                pieces=(discretisation + tail) * fill,
                k=k,
                shifted=(kernel.shift - p) * k,
                aliases=np.zeros(k.shape),
            )
        )
    return out, count


def _tail(modulus: Floats, bend: _Bend, h: float) -> float:
    """Twice the geometric continuation of the last terms, which decay at least exponentially along the ray."""
    last, before = float(modulus[-1]), float(modulus[-4])
    if last == 0.0:
        return 0.0
    if not before > last:
        return np.inf
    ratio = (last / before) ** (1.0 / 3.0)
    return 2.0 * last * ratio / (1.0 - ratio)
