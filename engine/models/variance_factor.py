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
change is below ``1e-60 |y|``. For a variance that starts far below where it will be (``kappa tau`` small, ``v0`` much
smaller than ``kappa theta tau``) the two parts of ``A`` cancel, and ``A`` is summed from its series instead.

The principal logarithm is the continuous one along the real direction inside the strip (Lord and Kahl 2010, from
memory). On a path that leaves the strip it is continued along the path.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Complexes, Floats

__all__ = ["FactorExponent", "explosion_edges", "factor_exponent"]

_TINY = 1e-160  # stands in for D = 0, where S = tau exactly
_SIGMA2_FLOOR = 1e-60
_YOUNG = 0.5  # |D tau| under which the series of A is used: 14 terms leave 0.5^14 / 15! < 1e-16


@dataclass(frozen=True, slots=True)
class FactorExponent:
    """``log_value``: the exponent; ``size``: sum of the moduli of its parts, the scale of its rounding error."""

    log_value: Complexes
    size: Floats


def factor_exponent(
    q: Any,
    b: Any,
    d2: Any,
    *,
    v0: Any,
    kappa_theta: Any,
    sigma: Any,
    tau: Any,
    along_path: bool = False,
) -> FactorExponent:
    """``kappa theta A + v0 B`` for arrays ``q``, ``b``, ``d2`` that broadcast with the parameters.

    Units: ``tau`` in years, variances per year. Accuracy: a few units of rounding times ``size``.
    """
    sigma2 = sigma * sigma
    d = np.sqrt(d2)
    d = np.where(d == 0.0, _TINY, d)
    one_minus_e, e = _one_minus_exp(d * tau)
    s = one_minus_e / d
    negative = np.real(b) < 0.0
    if np.any(negative):
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            r = np.where(negative, (b - d) / np.maximum(sigma2, _SIGMA2_FLOOR), q / np.where(negative, 1.0, b + d))
    else:
        r = q / (b + d)
    y = 0.5 * s * r
    x = sigma2 * y
    log_half = _log1p(x, along_path)
    b_part = v0 * (q * s) / (2.0 + 2.0 * x)
    drift = r * tau
    ratio = 2.0 * log_half / np.maximum(sigma2, _SIGMA2_FLOOR)
    ratio = np.where(sigma2 > _SIGMA2_FLOOR, ratio, 2.0 * y)
    a_part = drift - ratio
    size_a = kappa_theta * np.abs(drift)
    if np.any(kappa_theta * tau > 16.0 * v0):
        a_part, size_a = _young_variance(a_part, size_a, d=d, r=r, x=x, s=s, tau=tau, sigma2=sigma2, kt=kappa_theta)
    log_value = kappa_theta * a_part + b_part
    size = 2.0 * size_a + np.abs(b_part) * (2.0 + np.abs(d * tau) * np.abs(e))
    return FactorExponent(log_value, size)


def _one_minus_exp(dt: Any) -> tuple[Any, Any]:
    """``1 - exp(-dt)`` and ``exp(-dt)`` for ``Re dt >= 0`` with relative accuracy down to ``dt -> 0``."""
    decay = np.expm1(-dt.real)
    half = 0.5 * dt.imag
    sine = np.sin(half)
    scale = 1.0 + decay
    real = -decay + scale * (2.0 * sine * sine)
    imag = scale * (2.0 * sine * np.cos(half))
    one_minus = real + 1j * imag
    return one_minus, 1.0 - one_minus


def _log1p(x: Any, along_path: bool) -> Any:
    """Complex ``log(1 + x)`` with relative accuracy as ``x -> 0``; continued along the last axis on request."""
    re, im = x.real, x.imag
    inner = re * (2.0 + re) + im * im
    near = inner > -0.75
    with np.errstate(divide="ignore", invalid="ignore"):
        real = np.where(near, 0.5 * np.log1p(np.where(near, inner, 0.0)), np.log(np.hypot(1.0 + re, im)))
    angle = np.arctan2(im, 1.0 + re)
    if along_path:
        angle = np.unwrap(angle, axis=-1)
    return real + 1j * angle


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
    size_a = np.where(small, kt * (np.abs(first) + np.abs(second)), size_a)
    return a_part, size_a


def explosion_edges(
    *, kappa: Any, sigma: Any, rho: Any, tau: Any, upper: bool, start: float = 1e-9, stop: float = 1e12
) -> Floats:
    """Edge of the moment strip: the ``p`` whose explosion time equals ``tau``, approached from inside.

    Explosion time (Andersen and Piterbarg 2007, proposition 3.1, from memory), with ``chi = rho sigma p - kappa``,
    ``Delta = chi^2 - sigma^2 (p^2 - p)``: infinite if ``Delta >= 0`` and ``chi < 0``;
    ``2 atanh(sqrt(Delta)/chi)/sqrt(Delta)`` if ``Delta >= 0`` and ``chi > 0``; ``2 atan2(beta, chi)/beta`` with
    ``beta = sqrt(-Delta)`` otherwise. Its reciprocal is continuous and monotone beyond [0, 1], so a bracketing
    root search on it cannot fail; the inner end of the last bracket is returned (within 1e-13 relative), as the
    distance of ``p`` from 1 (``upper``) or from 0 (lower edge). Beyond ``stop`` the edge counts as infinite.
    """
    kappa, sigma, rho, tau = np.broadcast_arrays(*np.atleast_1d(kappa, sigma, rho, tau))
    rate = 1.0 / tau

    def excess(t: Any) -> Any:
        """``1/T* - 1/tau`` at distance ``exp(t)``: negative inside the strip."""
        p = 1.0 + np.exp(t) if upper else -np.exp(t)
        return _explosion_rate(p, kappa, sigma, rho) - rate

    lo = np.full(tau.shape, np.log(start))
    hi = np.full(tau.shape, np.log(stop))
    f_hi = excess(hi)
    infinite = f_hi <= 0.0
    f_lo = excess(lo)
    none = f_lo >= 0.0
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        _narrow(excess, lo, hi, f_lo, f_hi)
    edge = np.exp(lo) * (1.0 - 1e-15)
    edge = np.where(infinite, np.inf, edge)
    return np.where(none, start, edge)


def _narrow(excess: Any, lo: Floats, hi: Floats, f_lo: Floats, f_hi: Floats) -> None:
    """Shrink the brackets in place: bisection while they are wide, then false position with the Illinois weight."""
    side = np.zeros(lo.shape)
    for step in range(80):
        width = hi - lo
        if np.all(width <= 2e-14 * np.maximum(1.0, np.abs(lo))):
            return
        secant = hi - f_hi * width / (f_hi - f_lo)
        inside = (secant > lo) & (secant < hi) & (width < 0.7) & (step % 4 != 3)
        mid = np.where(inside, np.clip(secant, lo + 1e-3 * width, hi - 1e-3 * width), lo + 0.5 * width)
        mid = np.where(inside & (width < 1e-5), np.clip(secant + 2e-15, lo + 1e-14, hi - 1e-14), mid)
        f = excess(mid)
        low = f < 0.0
        f_hi[...] = np.where(low, np.where(side < 0, 0.5 * f_hi, f_hi), f)
        f_lo[...] = np.where(low, f, np.where(side > 0, 0.5 * f_lo, f_lo))
        lo[...] = np.where(low, mid, lo)
        hi[...] = np.where(low, hi, mid)
        side = np.where(low, -1.0, 1.0)


def _explosion_rate(p: Any, kappa: Any, sigma: Any, rho: Any) -> Any:
    """``1 / T*(p)``, zero where the moment never explodes."""
    chi = rho * sigma * p - kappa
    delta = kappa * kappa + sigma * p * ((sigma - 2.0 * kappa * rho) - sigma * (1.0 - rho) * (1.0 + rho) * p)
    root = np.sqrt(np.abs(delta))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        real = 0.5 * root / np.arctanh(np.minimum(root / np.where(chi > 0, chi, 1.0), 1.0 - 1e-16))
        curled = 0.5 * root / np.arctan2(root, chi)
        level = np.where(delta < 0.0, curled, np.where(chi > 0.0, real, 0.0))
        level = np.where((root == 0.0) & (chi > 0.0), 0.5 * chi, level)
    return level
