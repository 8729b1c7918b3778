"""One square-root variance factor: the exponent shared by every affine stochastic-variance model here.

Problem. For ``dv = kappa (theta - v) dt + sigma sqrt(v) dW`` and complex ``w`` (``w = i z``), the expectation
``E[exp(w X)]`` is ``exp(kappa theta A + v0 B)`` where ``B' = q/2 - b B + sigma^2 B^2 / 2``, ``A' = B``,
``b = kappa - rho sigma w``, ``q = w^2 - w``.

Formula, with the decaying exponential (Heston 1993 as rearranged by Albrecher, Mayer, Schoutens and Tistaert 2007,
"The little Heston trap", from memory):

    D = sqrt(b^2 - sigma^2 q), Re D >= 0,    E = exp(-D tau),    S = (1 - E) / D,
    r = (b - D) / sigma^2 = q / (b + D),     y = S r / 2,        Q / 2 = 1 + sigma^2 y
    log phi = kappa theta (r tau - 2 log1p(sigma^2 y) / sigma^2) + v0 q S / (2 + 2 sigma^2 y)

Tricks, and why they are safe. ``D^2`` is expanded in ``w`` so that ``1 - rho^2`` enters as ``(1 - rho)(1 + rho)``
and nothing cancels at ``rho -> +-1``. ``1 - E`` is built from expm1 and half-angle sines, so ``S -> tau`` smoothly as
``D tau -> 0``. ``r`` takes whichever of its two forms adds numbers of one sign. ``log1p(sigma^2 y)/sigma^2`` tends to
``y`` as ``sigma -> 0`` with no switch: ``sigma^2`` is only floored at 1e-60 inside that ratio, where the relative
change is below ``1e-60 |y|``. For a variance that starts far below its long-run level and has no time to get there
(``kappa tau`` small) the two parts of ``A`` cancel, and ``A`` is summed from its series instead.

The principal logarithm is the continuous one along the real direction inside the strip (Lord and Kahl 2010, from
memory). On a path that leaves the strip it is continued along the path.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Complexes, Floats

__all__ = ["FactorExponent", "explosion_edges", "factor_exponent"]

_FAR = 0.7  # Re D tau above which 1 - exp(-D tau) loses less than a unit of rounding by itself
_TINY = 1e-160  # stands in for D = 0, where S = tau exactly
_SIGMA2_FLOOR = 1e-60
_NEAREST, _FARTHEST = float(np.log(1e-9)), float(np.log(1e12))  # of an edge from 0 or 1, in the logarithm
_MESH = 17
_YOUNG = 0.5  # |D tau| under which the series of A is used: 14 terms leave 0.5^14 / 15! < 1e-16


@dataclass(frozen=True, slots=True)
class FactorExponent:
    """``log_value``: the exponent; ``size``: sum of the moduli of its parts, the scale of its rounding error (None
    unless asked for)."""

    log_value: Complexes
    size: Floats | None


def factor_exponent(
    q: Any,
    b: Any,
    d2: Any,
    *,
    v0: Any,
    kappa: Any,
    theta: Any,
    sigma: Any,
    tau: Any,
    along_path: bool = False,
    sized: bool = False,
) -> FactorExponent:
    """``kappa theta A + v0 B`` for complex arrays ``q``, ``b``, ``d2`` that broadcast with the parameters.

    Units: ``tau`` in years, variances per year. Accuracy: a few units of rounding times ``size``.
    """
    sigma2 = sigma * sigma
    kappa_theta = kappa * theta
    d = np.sqrt(d2)
    if not d.all():
        d = np.where(d == 0.0, _TINY, d)
    dt = d * tau
    one_minus_e = _one_minus_exp(dt)
    s = one_minus_e / d
    r = _small_root(q, b, d, sigma2)
    x = s * r * (0.5 * sigma2)
    b_part = (q * v0) * s / (2.0 + 2.0 * x)
    drift = r * tau
    a_part = drift - _log_ratio(x, s * r, sigma2, along_path)
    size_a = kappa_theta * np.abs(drift) if sized else None
    if np.any(kappa_theta > 8.0 * kappa * v0):
        a_part, size_a = _young_variance(a_part, size_a, d=d, r=r, x=x, s=s, tau=tau, sigma2=sigma2, kt=kappa_theta)
    log_value = kappa_theta * a_part + b_part
    if size_a is None:
        return FactorExponent(log_value, None)
    size = 2.0 * size_a + np.abs(b_part) * (2.0 + np.abs(dt) * np.exp(-dt.real))
    return FactorExponent(log_value, size)


def _one_minus_exp(dt: Any) -> Any:
    """``1 - exp(-dt)`` for ``Re dt >= 0``, to relative accuracy however small ``dt``."""
    if dt.real.min(initial=np.inf) > _FAR:
        return 1.0 - np.exp(-dt)
    decay = np.expm1(-dt.real)
    half = 0.5 * dt.imag
    sine = np.sin(half)
    twice = (2.0 + 2.0 * decay) * sine
    out = np.empty_like(dt)
    out.real = twice * sine - decay
    out.imag = twice * np.cos(half)
    return out


def _small_root(q: Any, b: Any, d: Any, sigma2: Any) -> Any:
    """``r = q / (b + D) = (b - D) / sigma^2``, whichever adds numbers of one sign."""
    negative = b.real < 0.0
    if not negative.any():
        return q / (b + d)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        return np.where(negative, (b - d) / np.maximum(sigma2, _SIGMA2_FLOOR), q / np.where(negative, 1.0, b + d))


def _log_ratio(x: Any, twice_y: Any, sigma2: Any, along_path: bool) -> Any:
    """``2 log1p(x) / sigma^2`` with ``x = sigma^2 y``, which tends to ``2 y``."""
    log = _log1p(x, along_path)
    if np.min(sigma2) > _SIGMA2_FLOOR:
        return log * (2.0 / sigma2)
    return np.where(sigma2 > _SIGMA2_FLOOR, log * (2.0 / np.maximum(sigma2, _SIGMA2_FLOOR)), twice_y)


def _log1p(x: Any, along_path: bool) -> Any:
    """Complex ``log(1 + x)`` with relative accuracy as ``x -> 0``; continued along the last axis on request."""
    re, im = x.real, x.imag
    inner = re * (2.0 + re) + im * im
    out = np.empty_like(x)
    if inner.min(initial=0.0) > -0.75:
        out.real = 0.5 * np.log1p(inner)
    else:
        near = inner > -0.75
        with np.errstate(divide="ignore"):
            out.real = np.where(near, 0.5 * np.log1p(np.where(near, inner, 0.0)), np.log(np.hypot(1.0 + re, im)))
    angle = np.arctan2(im, 1.0 + re)
    out.imag = np.unwrap(angle, axis=-1) if along_path else angle
    return out


def _young_variance(
    a_part: Any, size_a: Any, *, d: Any, r: Any, x: Any, s: Any, tau: Any, sigma2: Any, kt: Any
) -> tuple[Any, Any]:
    """``A = r (tau - S) + 2 (x - log1p(x)) / sigma^2`` by series where ``|D tau|`` and ``|x|`` are small."""
    dt = d * tau
    small = (np.abs(dt) < _YOUNG) & (np.abs(x) < 0.1)
    if not np.any(small):
        return a_part, size_a
    dt = np.where(small, dt, 0.0)
    xs = np.where(small, x, 0.0)
    inner = np.zeros_like(dt)
    for n in range(14, 0, -1):  # 1 - (1 - exp(-t)) / t = t/2 - t^2/6 + ...
        inner = (1.0 - inner) * dt / (n + 1.0)
    quad = np.zeros_like(xs)
    for n in range(16, 1, -1):  # (x - log1p(x)) / x^2 = 1/2 - x/3 + x^2/4 - ...
        quad = 1.0 / n - xs * quad
    first = r * tau * inner
    second = s * r * xs * quad  # 2 x / sigma^2 = S r
    series = first + second
    a_part = np.where(small, series, a_part)
    if size_a is not None:
        size_a = np.where(small, kt * (np.abs(first) + np.abs(second)), size_a)
    return a_part, size_a


def explosion_edges(*, kappa: Any, sigma: Any, rho: Any, tau: Any) -> tuple[Floats, Floats]:
    """Edges ``(p_lo, p_hi)`` of the moment strip: where the explosion time equals ``tau``, approached from inside.

    Explosion time (Andersen and Piterbarg 2007, proposition 3.1, from memory), with ``chi = rho sigma p - kappa``,
    ``Delta = chi^2 - sigma^2 (p^2 - p)``: infinite if ``Delta >= 0`` and ``chi < 0``;
    ``2 atanh(sqrt(Delta)/chi)/sqrt(Delta)`` if ``Delta >= 0`` and ``chi > 0``; ``2 atan2(beta, chi)/beta`` with
    ``beta = sqrt(-Delta)`` otherwise. Its reciprocal is continuous and monotone beyond [0, 1], so a bracketing root
    search cannot fail; the inner end of the last bracket is returned (within 1e-13 relative of the distance from 0 or
    1). The lower edge is the upper one under the share measure: ``p -> 1 - p``, ``kappa -> kappa - rho sigma``,
    ``rho -> -rho``. Beyond 1e12 an edge counts as infinite.
    """
    kappa, sigma, rho, tau = np.broadcast_arrays(*np.atleast_1d(kappa, sigma, rho, tau))
    shape = kappa.shape
    sides = [
        np.concatenate([np.ravel(a), np.ravel(b)])[:, None]
        for a, b in ((kappa, kappa - rho * sigma), (sigma, sigma), (rho, -rho), (tau, tau))
    ]
    distance = _distance(*sides)
    half = distance.shape[0] // 2
    return -distance[half:].reshape(shape), 1.0 + distance[:half].reshape(shape)


def _distance(kappa: Floats, sigma: Floats, rho: Floats, tau: Floats) -> Floats:
    """Distance of the upper edge from 1, from below; columns in, vector out."""
    rate = 1.0 / tau
    lo = np.full(tau.shape, _NEAREST)
    width = _FARTHEST - _NEAREST
    mesh = np.linspace(0.0, 1.0, _MESH)
    at = np.arange(tau.shape[0])
    f_lo = f_hi = np.zeros(0)
    for round_ in range(2):  # two meshes narrow the bracket from 48 to 0.2 in the logarithm
        t = lo + width * mesh
        f = _explosion_rate(1.0 + np.exp(t), kappa, sigma, rho) - rate
        inside = np.sum(f < 0.0, axis=1)
        if round_ == 0:
            infinite, none = inside == _MESH, inside == 0
        cell = np.clip(inside - 1, 0, _MESH - 2)
        lo = t[at, cell][:, None]
        width = width / (_MESH - 1)
        f_lo, f_hi = f[at, cell], f[at, cell + 1]
    low = _narrow(lo[:, 0], lo[:, 0] + width, f_lo, f_hi, kappa[:, 0], sigma[:, 0], rho[:, 0], rate[:, 0])
    edge = np.exp(low) * (1.0 - 4e-15)
    return np.where(infinite, np.inf, np.where(none, np.exp(_NEAREST), edge))


def _narrow(
    lo: Floats, hi: Floats, f_lo: Floats, f_hi: Floats, kappa: Floats, sigma: Floats, rho: Floats, rate: Floats
) -> Floats:
    """False position with the Illinois weight on brackets 0.2 wide; returns their inner ends."""
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
