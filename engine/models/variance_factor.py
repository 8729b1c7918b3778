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
``D tau -> 0``. ``r`` takes whichever of its two forms adds numbers of one sign, and with ``Re b < 0``, where ``x``
may come near -1, ``1 + sigma^2 y = (E (D - b) - sigma^2 q / (D - b)) / (2 D)``. ``log1p(sigma^2 y)/sigma^2`` tends to
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

__all__ = [
    "FactorExponent",
    "FactorParts",
    "exponent_size",
    "factor_exponent",
    "factor_parts",
    "log1p",
    "long_run_part",
]

_FAR = 0.7  # Re D tau above which 1 - exp(-D tau) loses less than a unit of rounding by itself
_TINY = 1e-160  # stands in for D = 0, where S = tau exactly
_SIGMA2_FLOOR = 1e-60
_YOUNG = 0.5  # |D tau| under which the series of A is used: 14 terms leave 0.5^14 / 15! < 1e-16


@dataclass(frozen=True, slots=True)
class FactorExponent:
    """``log_value``: the exponent; ``size``: sum of the moduli of its parts, the scale of its rounding error (None
    unless asked for)."""

    log_value: Complexes
    size: Floats | None


@dataclass(frozen=True, slots=True)
class FactorParts:
    """The building blocks of the module docstring: ``D``, ``D tau``, ``S``, ``r``, ``x = sigma^2 S r / 2`` and ``1 +
    x``."""

    d: Complexes
    dt: Complexes
    s: Complexes
    r: Complexes
    x: Complexes
    one_x: Complexes


def factor_parts(q: Any, b: Any, d2: Any, *, sigma2: Any, tau: Any) -> FactorParts:
    """``D``, ``S`` and ``r`` without cancellation, for complex arrays that broadcast with the parameters."""
    d = np.sqrt(d2)
    if not d.all():
        d = np.where(d == 0.0, _TINY, d)
    dt = d * tau
    s = _one_minus_exp(dt) / d
    negative = b.real < 0.0
    if not negative.any():
        r = q / (b + d)
        x = s * r * (0.5 * sigma2)
        return FactorParts(d, dt, s, r, x, 1.0 + x)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        wide = np.where(negative, d - b, d + b)  # the sum of two numbers of one sign
        r = np.where(negative, -wide / np.maximum(sigma2, _SIGMA2_FLOOR), q / wide)
        x = s * r * (0.5 * sigma2)
        one_x = np.where(negative & (np.abs(x) > 0.5), (np.exp(-dt) * wide - sigma2 * q / wide) / (2.0 * d), 1.0 + x)
    return FactorParts(d, dt, s, r, x, one_x)


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
    f = factor_parts(q, b, d2, sigma2=sigma2, tau=tau)
    b_part = (0.5 * v0) * q * f.s / f.one_x
    young = bool(np.any(kappa_theta > 8.0 * kappa * v0))
    a_part, size_a = long_run_part(f, sigma2=sigma2, tau=tau, along_path=along_path, young=young, sized=sized)
    log_value = kappa_theta * a_part + b_part
    if size_a is None:
        return FactorExponent(log_value, None)
    return FactorExponent(log_value, exponent_size(f, kappa_theta * size_a, b_part))


def exponent_size(f: FactorParts, size_a: Any, b_part: Any) -> Floats:
    """The scale of the exponent's rounding error, from that of its two parts."""
    near_edge = np.abs(f.x) / np.abs(f.one_x)  # 1 + x -> 0 where the moment explodes
    return np.asarray(2.0 * size_a + np.abs(b_part) * (2.0 + 2.0 * near_edge + np.abs(f.dt) * np.exp(-f.dt.real)))


def long_run_part(
    f: FactorParts, *, sigma2: Any, tau: Any, along_path: bool, young: bool, sized: bool
) -> tuple[Complexes, Floats | None]:
    """``A`` and, if ``sized``, the sum of the moduli of its parts; ``young``: sum small ones from their series."""
    drift = f.r * tau
    a_part = drift - _log_ratio(f, sigma2, along_path)
    size = np.abs(drift) + np.abs(f.s * f.r / f.one_x) if sized else None
    if not young:
        return a_part, size
    return _young_variance(a_part, size, f, tau=tau)


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


def _log_ratio(f: FactorParts, sigma2: Any, along_path: bool) -> Any:
    """``2 log1p(x) / sigma^2`` with ``x = sigma^2 y``, which tends to ``2 y``."""
    log = log1p(f.x, f.one_x, along_path)
    if np.min(sigma2) > _SIGMA2_FLOOR:
        return log * (2.0 / sigma2)
    return np.where(sigma2 > _SIGMA2_FLOOR, log * (2.0 / np.maximum(sigma2, _SIGMA2_FLOOR)), f.s * f.r)


def log1p(x: Any, one_x: Any, along_path: bool) -> Any:
    """Complex ``log(1 + x)`` from ``x`` and ``1 + x``, with relative accuracy as ``x -> 0``; continued along the last
    axis on request."""
    re, im = x.real, x.imag
    inner = re * (2.0 + re) + im * im
    out = np.empty_like(x)
    if inner.min(initial=0.0) > -0.75:
        out.real = 0.5 * np.log1p(inner)
    else:
        near = inner > -0.75
        with np.errstate(divide="ignore"):
            out.real = np.where(near, 0.5 * np.log1p(np.where(near, inner, 0.0)), np.log(np.abs(one_x)))
    angle = np.arctan2(one_x.imag, one_x.real)
    out.imag = np.unwrap(angle, axis=-1) if along_path else angle
    return out


def _young_variance(a_part: Any, size: Any, f: FactorParts, *, tau: Any) -> tuple[Any, Any]:
    """``A = r (tau - S) + 2 (x - log1p(x)) / sigma^2`` by series where ``|D tau|`` and ``|x|`` are small."""
    small = (np.abs(f.dt) < _YOUNG) & (np.abs(f.x) < 0.1)
    if not np.any(small):
        return a_part, size
    dt = np.where(small, f.dt, 0.0)
    x = np.where(small, f.x, 0.0)
    inner = np.zeros_like(dt)
    for n in range(14, 0, -1):  # 1 - (1 - exp(-t)) / t = t/2 - t^2/6 + ...
        inner = (1.0 - inner) * dt / (n + 1.0)
    quad = np.zeros_like(x)
    for n in range(16, 1, -1):  # (x - log1p(x)) / x^2 = 1/2 - x/3 + x^2/4 - ...
        quad = 1.0 / n - x * quad
    first = f.r * tau * inner
    second = f.s * f.r * x * quad  # 2 x / sigma^2 = S r
    a_part = np.where(small, first + second, a_part)
    if size is not None:
        size = np.where(small, np.abs(first) + np.abs(second), size)
    return a_part, size
