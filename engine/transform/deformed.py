"""Hard rows: the contour is bent into the sector where the integrand decays, and a hundred or so nodes suffice.

``z(y) = i w1 + b sinh(i w + y)`` crosses the imaginary axis at ``-i p`` (``w1 + b sin w = -p``) and leaves along rays
of angle ``w``. The characteristic functions served here are analytic off the imaginary axis (Lucic 2007 for Heston), so
the contour may be bent freely in the right half plane while it crosses the axis between the same singularities. It is
bent down (``w < 0``) for strikes above ``k_inf``, up for those below, where ``phi(z) ~ exp(i z k_inf)`` far out.

    V(k) = (1/pi) Re int_0^inf exp((shift - i z) k) phi(z) factor(i z) z'(y) dy

Trapezoidal rule with step ``h``; its error for a function analytic in ``|Im y| < d`` is at most
``(H+ + H-) / (exp(2 pi d / h) - 1)`` with ``H+-`` the integrals of the modulus along ``Im y = +-d`` (Trefethen and
Weideman 2014, theorem 5.1). ``H+-`` are themselves computed by quadrature and doubled; the tail beyond the last node
is the geometric continuation of its last terms, doubled: conservative rather than proven, and said so. Moduli are
log-convex in ``k``, so their largest value over a row's strikes is taken at its two ends.

Source: S. Boyarchenko and S. Levendorskii, "Sinh-acceleration: efficient evaluation of probability distributions,
option pricing, and Monte Carlo simulations", IJTAF 22(3), 2019; V. Lucic, "On singularities in the Heston model", 2007
(both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import EPS, Complexes, Floats
from engine.protocols import Model
from engine.transform.bounds import log_moduli
from engine.transform.kernels import Kernel
from engine.transform.plan import Plan
from engine.transform.samples import sample

__all__ = ["BentSum", "bent_sums"]

_PROBE_STEP = 0.25
_SHORT, _LONG = 16.0, 44.0  # |z| up to exp of it times b
_CANDIDATES = ((0.8, 0.9), (0.8, 0.6), (0.55, 0.85), (0.55, 0.5), (0.3, 0.8), (0.3, 0.4))  # (share of angle, of gap)
_NEAR_ZONE = 1.0 / 64.0  # of a standard deviation on either side of k_inf
_MOST_NODES = 2000
_STRIKE_BLOCK = 256


@dataclass(frozen=True, slots=True)
class BentSum:
    """One bent contour, for the strikes ``low <= k < high`` on one side of ``k_inf``: arguments ``i z`` (N,), terms
    ``psi`` (K, N) at the strike ``k_near`` nearest to ``k_inf``, where they are largest, in units of
    ``exp(log_scale)``, and per kernel (K,) what a bound needs."""

    low: float
    high: float
    k_near: float
    iz: Complexes
    psi: Complexes
    log_scale: float
    rounding: Floats
    slope: Floats
    pieces: Floats

    def serves(self, k: Floats) -> Any:
        """Which of the strikes are its own."""
        return (k >= self.low) & (k < self.high)

    def totals(self, k: Floats, p: float) -> Floats:
        """The sums of every kernel at ``k`` (n,): shape (K, n)."""
        out = np.empty((self.psi.shape[0], k.shape[0]))
        for start in range(0, k.shape[0], _STRIKE_BLOCK):
            part = slice(start, start + _STRIKE_BLOCK)
            out[:, part] = (np.exp(np.multiply.outer(k[part] - self.k_near, p - self.iz)) @ self.psi.T).real.T
        return out


@dataclass(frozen=True, slots=True)
class _Bend:
    """A trial contour: its shape, the step it needs and where it may stop."""

    w1: float
    b: float
    w: float
    d: float
    hardy: Floats  # (H+ + H-) / pi per kernel, before the strike factor, in units of M(p)
    worst: float  # the largest of them, every kernel scaled to the vanilla at y = 0
    stop: float


def bent_sums(model: Model, tau: float, plan: Plan, row: int, kernels: list[Kernel]) -> list[BentSum]:
    """The contours of one row, at most four. ``model`` holds that row's parameters alone, as floats or (1, 1)."""
    k_inf, limit = model.bend(tau)
    low, high = float(plan.k_low[row]), float(plan.k_high[row])
    # at k_inf itself only a power of |z| is left: a kernel that does not decay gets the strikes right there apart
    apart = 0.0
    if any(kernel.power < 1 for kernel in kernels):
        apart = _NEAR_ZONE * float(np.sqrt(np.ravel(model.mean_variance(tau))[0]))
    out = []
    for sign, near, far in ((-1.0, k_inf, high), (1.0, k_inf, low)):
        middle = near - sign * apart
        for edge, end in ((near, middle), (middle, far)):
            span = (max(edge, low), min(end, high)) if sign < 0.0 else (max(end, low), min(edge, high))
            if span[0] <= span[1] and (edge != end or edge == far):
                serves = (edge, np.inf if end == far else end) if sign < 0.0 else (-np.inf if end == far else end, edge)
                out.append(_bent_sum(model, tau, plan, row, kernels, (sign, limit), span, serves))
    return out


def _line(w1: Any, b: Any, angle: Any, y: Floats) -> tuple[Any, Any]:
    """``z`` and ``dz/dy`` on the line ``Im y`` that turns the angle into ``angle``."""
    arg = y + 1j * angle
    return 1j * w1 + b * np.sinh(arg), b * np.cosh(arg)


def _choose(
    model: Model,
    tau: float,
    plan: Plan,
    row: int,
    kernels: list[Kernel],
    sector: tuple[float, float],
    span: tuple[float, float],
    log_scale: float,
    length: float,
) -> _Bend:
    """The cheapest of a few bends: by the step its analyticity allows and the length its decay needs."""
    sign, limit = sector
    p = float(plan.exponent[row])
    target = float(plan.log_target[row]) - log_scale
    lower, upper = _gap(plan, row)
    share, fill = np.array(_CANDIDATES).T
    w = sign * 0.5 * share * limit
    d = 0.47 * share * limit
    b = fill * np.minimum((p - lower) / (np.sin(w + d) - np.sin(w)), (upper - p) / (np.sin(w) - np.sin(w - d)))
    w1 = -p - b * np.sin(w)
    angle = np.concatenate([w, w + d, w - d])[:, None]
    probe = np.arange(0.0, length + 0.5 * _PROBE_STEP, _PROBE_STEP)
    z, dz = _line(np.tile(w1, 3)[:, None], np.tile(b, 3)[:, None], angle, probe)
    with np.errstate(over="ignore", invalid="ignore", divide="ignore", under="ignore"):
        level = log_moduli(model, z, np.full((1, 1), tau), kernels, along_path=True) + np.log(np.abs(dz))
        lift = z.imag + p
        level += np.maximum(lift * span[0], lift * span[1])
        level[np.isnan(level)] = np.inf
        level += _between_probes(level) - log_scale
        weight = np.exp(level) * (2.0 * _PROBE_STEP / np.pi)
    weight = weight.reshape(len(kernels), 3, len(_CANDIDATES), probe.shape[0])
    start = weight[:, 0, :, :1]
    unit = np.where(start > 0.0, start[:1] / np.where(start > 0.0, start, 1.0), 1.0)
    hardy = weight[:, 1:].sum(axis=(1, 3))
    with np.errstate(invalid="ignore", over="ignore"):
        tail = np.max(np.cumsum((weight[:, 0] * unit)[..., ::-1], axis=-1)[..., ::-1], axis=0)
        worst = np.max(hardy * unit[..., 0], axis=0)
        small = tail <= np.exp(target)
        stop = np.where(small.any(axis=1), probe[np.argmax(small, axis=1)], np.inf)
        cost = stop * np.maximum(np.log(worst) - target, 1.0) / d
    best = int(np.argmin(np.where(np.isnan(cost), np.inf, cost)))
    return _Bend(
        float(w1[best]),
        float(b[best]),
        float(w[best]),
        float(d[best]),
        hardy[:, best],
        float(worst[best]),
        float(stop[best]),
    )


def _between_probes(level: Floats) -> Floats:
    """By how much a log-modulus may exceed its nearest probe between probes: a parabola does by an eighth of its second
    difference; twice the largest one nearby is allowed for. A peak of ``exp(lambda exp(...))`` is that narrow."""
    with np.errstate(invalid="ignore"):
        mirrored = np.concatenate([level[..., 1:2], level], axis=-1)  # even in y, by conjugate symmetry
        bent = np.abs(np.diff(mirrored, n=2, axis=-1))
    bent = np.where(np.isnan(bent), 0.0, bent)
    padded = np.concatenate([bent[..., :1], bent, bent[..., -1:], bent[..., -1:]], axis=-1)
    widest = np.maximum(np.maximum(padded[..., :-2], padded[..., 1:-1]), padded[..., 2:])
    return np.asarray(0.25 * widest)


def _gap(plan: Plan, row: int) -> tuple[float, float]:
    """The singularities on either side of ``-i p`` on the imaginary axis, as moment orders."""
    p = float(plan.exponent[row])
    slice_of = plan.slice_of[row]
    if p > 1.0:
        return 1.0, float(plan.moments.high[slice_of])
    return (float(plan.moments.low[slice_of]), 0.0) if p < 0.0 else (0.0, 1.0)


def _bent_sum(
    model: Model,
    tau: float,
    plan: Plan,
    row: int,
    kernels: list[Kernel],
    sector: tuple[float, float],
    span: tuple[float, float],
    serves: tuple[float, float],
) -> BentSum:
    """Trapezoidal terms on the chosen contour with the bound's ingredients."""
    p = float(plan.exponent[row])
    log_scale = float(np.ravel(model.log_moment(np.full((1, 1), p), tau))[0])
    bend = _choose(model, tau, plan, row, kernels, sector, span, log_scale, _SHORT)
    if not np.isfinite(bend.stop):
        bend = _choose(model, tau, plan, row, kernels, sector, span, log_scale, _LONG)
    decades = (
        max(float(np.log(bend.worst) - plan.log_target[row]) + log_scale, 1.0) if np.isfinite(bend.worst) else 60.0
    )
    count, h = _steps(bend, decades)
    z, dz = _line(bend.w1, bend.b, bend.w, h * np.arange(count, dtype=np.float64))
    found = sample(model, z[None, :], tau, kernels, along_path=True)
    log_phi, size = found.log_phi, found.size
    iz = 1j * z
    k_near = span[0] if sector[0] < 0.0 else span[1]
    lift = z.imag + p
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        base = np.exp(log_phi[0] - log_scale + k_near * (p - iz)) * dz * (h / np.pi)
        discretisation = bend.hardy / np.expm1(min(2.0 * np.pi * bend.d / h, 700.0))
        largest = np.exp(np.maximum(lift * (span[0] - k_near), lift * (span[1] - k_near)))
    base[0] *= 0.5
    lost = size[0] + 8.0 + 0.5 * np.log2(count)
    psi = np.empty((len(kernels), count), dtype=np.complex128)
    rounding, slope, pieces = (np.empty(len(kernels)) for _ in range(3))
    for i, kernel in enumerate(kernels):
        terms = base * kernel.factor(iz)
        relative = lost
        if kernel.parameter is not None:
            g = found.gradient[kernel.parameter][0]
            with np.errstate(divide="ignore", invalid="ignore"):
                relative = lost + np.where(g != 0.0, found.gradient_size[kernel.parameter][0] / np.abs(g), 0.0)
            terms *= g
        modulus = np.abs(terms) * largest
        rounding[i] = EPS * float(modulus @ relative)
        slope[i] = float(modulus @ np.abs(z))
        pieces[i] = discretisation[i] + _tail(modulus)
        psi[i] = terms
    return BentSum(*serves, k_near, iz, psi, log_scale, rounding, slope, pieces)


def _steps(bend: _Bend, decades: float) -> tuple[int, float]:
    """Nodes and step: as fine as the analyticity wants, as far as the decay needs, within ``_MOST_NODES``."""
    h = 2.0 * np.pi * bend.d / decades
    stop = bend.stop if np.isfinite(bend.stop) else _LONG
    if not h > 0.0:  # nothing is known of the contour: its bound will say so
        return 4, stop / 2.0
    count = min(max(int(np.ceil(stop / h)) + 2, 4), _MOST_NODES)
    return count, float(max(h, stop / (count - 2)))


def _tail(modulus: Floats) -> float:
    """Twice the geometric continuation of the last terms, which decay at least exponentially along the ray."""
    last, before = float(modulus[-1]), float(modulus[-4])
    if last == 0.0:
        return 0.0
    if not before > last:
        return np.inf
    ratio = (last / before) ** (1.0 / 3.0)
    return 2.0 * last * ratio / (1.0 - ratio) if ratio < 1.0 else np.inf
