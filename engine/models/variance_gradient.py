"""Derivatives of the variance factor's exponent by its parameters and by time, without cancellation.

Problem: ``d log phi / d (v0, kappa, theta, sigma, rho, tau)`` for ``log phi = kappa theta A + v0 B`` of
``engine.models.variance_factor``, to rounding, ``sigma -> 0`` and ``D tau -> 0`` included.

``A`` and ``B`` depend on ``kappa, sigma, rho`` only through ``b = kappa - rho sigma w`` and ``c = sigma^2``. With
``L(x) = log1p(x)/x``, ``A = r tau - 2 y L(x)``, ``B = q S / (2 + 2 x)``, ``y = S r / 2``, ``x = c y`` and a dot for
either derivative,

    D. = (b b. - q c. / 2) / D          r. = (r / D) (r c. / 2 - b.)         S. = D. (tau E - S) / D
    y. = (S. r + S r.) / 2              x. = c y. + y c.
    A. = tau r. - 2 y. / (1 + x) - 2 y^2 L'(x) c.        B. = B (S. / S - x. / (1 + x))
    dA/dtau = B                         dB/dtau = (q / 2) E / (1 + x)^2

There is no ``1 / sigma`` anywhere. Where ``|D tau|`` is small the terms of ``A.`` still cancel, and ``A``, ``B`` and
their derivatives are summed as power series in time from the Riccati equation: ``B = tau h(1)``, ``h' = q/2 - beta h
+ gamma h^2 / 2``, ``beta = b tau``, ``gamma = sigma^2 tau^2``.

The gradient is that of Cui, del Bano Rollin and Germano, "Full and fast calibration of the Heston stochastic volatility
model", Eur. J. Oper. Res. 263(2), 2017, in other variables; this arrangement is ours.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Complexes, Floats
from engine.models.variance_factor import FactorParts, exponent_size, factor_parts, log1p, long_run_part
from engine.protocols import CfGradient

__all__ = ["factor_gradient"]

_NEAR = 0.25  # |D tau| and |b tau| under which the series is used: ratio of its terms about 1 / 8
_TERMS = 18
_SMALL_X = 0.05  # |x| under which L'(x) is summed


@dataclass(frozen=True, slots=True)
class _Slopes:
    """``A``, ``B`` and their derivatives by ``b`` and by ``c``; sizes are sums of the moduli of the parts."""

    b_value: Complexes
    a_by_b: Complexes
    a_by_c: Complexes
    b_by_b: Complexes
    b_by_c: Complexes
    size_by_b: Floats
    size_by_c: Floats


def factor_gradient(
    w: Any,
    q: Any,
    b: Any,
    d2: Any,
    *,
    v0: Any,
    kappa: Any,
    theta: Any,
    sigma: Any,
    rho: Any,
    tau: Any,
    along_path: bool = False,
) -> CfGradient:
    """``log phi`` and its derivatives by v0, kappa, theta, sigma, rho and tau: (6, ...), with caps on their
    rounding."""
    sigma2 = sigma * sigma
    parts = factor_parts(q, b, d2, sigma2=sigma2, tau=tau)
    kappa_theta = kappa * theta
    a_value, size_a = long_run_part(parts, sigma2=sigma2, tau=tau, along_path=along_path, young=True, sized=True)
    slopes = _slopes(q, b, parts, sigma2=sigma2, tau=tau, kappa_theta=kappa_theta, v0=v0, along_path=along_path)
    b_part = v0 * slopes.b_value
    log_value = kappa_theta * a_value + b_part
    by_b = kappa_theta * slopes.a_by_b + v0 * slopes.b_by_b
    by_c = kappa_theta * slopes.a_by_c + v0 * slopes.b_by_c
    one_x = parts.one_x
    fading = (0.5 * q) * np.exp(-parts.dt) / (one_x * one_x)
    tilt = sigma * w
    gradient = np.empty((6, *np.shape(log_value)), dtype=np.complex128)
    gradient[0] = slopes.b_value
    gradient[1] = by_b + theta * a_value
    gradient[2] = kappa * a_value
    gradient[3] = (2.0 * sigma) * by_c - (rho * w) * by_b
    gradient[4] = -tilt * by_b
    gradient[5] = kappa_theta * slopes.b_value + v0 * fading
    size = 8.0 * exponent_size(parts, kappa_theta * size_a, b_part)
    caps = np.empty(gradient.shape)
    size_a = 16.0 * np.asarray(size_a)
    caps[0] = (16.0 + 8.0 * np.abs(parts.x / one_x)) * np.abs(slopes.b_value)
    caps[1] = slopes.size_by_b + theta * size_a
    caps[2] = kappa * size_a
    caps[3] = (2.0 * sigma) * slopes.size_by_c + np.abs(rho * w) * slopes.size_by_b
    caps[4] = np.abs(tilt) * slopes.size_by_b
    caps[5] = kappa_theta * caps[0] + v0 * np.abs(fading) * (16.0 + 4.0 * np.abs(parts.dt))
    return CfGradient(log_value, size, gradient, caps)


def _slopes(
    q: Any, b: Any, f: FactorParts, *, sigma2: Any, tau: Any, kappa_theta: Any, v0: Any, along_path: bool
) -> _Slopes:
    d_by_b, d_by_c = b / f.d, (-0.5 * q) / f.d
    r_by_b = -f.r / f.d
    r_by_c = -0.5 * f.r * r_by_b
    one_x = f.one_x
    b_value = 0.5 * q * f.s / one_x
    s_by_d = _s_slope(f, tau)
    half_s, half_r = 0.5 * f.s, 0.5 * f.r
    y_b_parts = (half_r * (s_by_d * d_by_b), half_s * r_by_b)
    y_c_parts = (half_r * (s_by_d * d_by_c), half_s * r_by_c)
    y_by_b, y_by_c = y_b_parts[0] + y_b_parts[1], y_c_parts[0] + y_c_parts[1]
    y = f.s * half_r
    curve = 2.0 * y * y * _log_ratio_slope(f, along_path)
    t1, t2, t3 = tau * r_by_b, 2.0 * y_by_b / one_x, tau * r_by_c
    t4 = 2.0 * y_by_c / one_x
    s_log = s_by_d / f.s
    u1, u2 = s_log * d_by_b, sigma2 * y_by_b / one_x
    u3, u4 = s_log * d_by_c, (sigma2 * y_by_c + y) / one_x
    modulus_b = v0 * np.abs(b_value)
    near = 1.0 / np.abs(one_x)
    size_y_b = near * (np.abs(y_b_parts[0]) + np.abs(y_b_parts[1]))
    size_y_c = near * (np.abs(y_c_parts[0]) + np.abs(y_c_parts[1]))
    edge = 1.0 + near  # 1 + x is small near the edge of the strip, and so are the digits of what is divided by it
    size_by_b = kappa_theta * (np.abs(t1) + 2.0 * size_y_b * edge) + modulus_b * (np.abs(u1) + sigma2 * size_y_b * edge)
    size_by_c = kappa_theta * (np.abs(t3) + 2.0 * size_y_c * edge + np.abs(curve) * edge) + modulus_b * (
        np.abs(u3) + (sigma2 * size_y_c + near * np.abs(y)) * edge
    )
    found = _Slopes(
        b_value, t1 - t2, t3 - t4 - curve, b_value * (u1 - u2), b_value * (u3 - u4), 64.0 * size_by_b, 64.0 * size_by_c
    )
    near = (np.abs(f.dt) < _NEAR) & (np.abs(b * tau) < _NEAR) & (np.abs(f.x) < 0.1)
    if not near.any():
        return found
    return _by_series(found, near, q, b, sigma2=sigma2, tau=tau, kappa_theta=kappa_theta, v0=v0)


def _s_slope(f: FactorParts, tau: Any) -> Any:
    """``dS/dD = (tau E - S) / D``, by its series ``-tau^2 (1/2 - t/3 + t^2/8 - ...)`` where ``t = D tau`` is small."""
    direct = (tau * np.exp(-f.dt) - f.s) / f.d
    small = np.abs(f.dt) < 0.5
    if not small.any():
        return direct
    t = np.where(small, f.dt, 0.0)
    term = np.ones_like(t)
    total = np.zeros_like(t)
    for n in range(16):  # sum over n of (-t)^n / (n! (n + 2))
        total += term / (n + 2.0)
        term = term * (-t) / (n + 1.0)
    return np.where(small, -tau * tau * total, direct)


def _log_ratio_slope(f: FactorParts, along_path: bool) -> Any:
    """``L'(x) = (1 / (1 + x) - log1p(x) / x) / x``."""
    x = f.x
    small = np.abs(x) < _SMALL_X
    series = np.zeros_like(x)
    t = np.where(small, x, 0.0)
    for n in range(13, 0, -1):  # sum over n >= 1 of (-1)^n n x^(n-1) / (n + 1)
        series = series * t + (n / (n + 1.0) if n % 2 == 0 else -n / (n + 1.0))
    if small.all():
        return series
    one_x = np.where(small, 1.0 + _SMALL_X, f.one_x)
    safe = np.where(small, _SMALL_X, x)  # keeps a path that starts near 0 on the branch it continues
    return np.where(small, series, (1.0 / one_x - log1p(safe, one_x, along_path) / safe) / safe)


def _by_series(
    found: _Slopes, near: Any, q: Any, b: Any, *, sigma2: Any, tau: Any, kappa_theta: Any, v0: Any
) -> _Slopes:
    """Replace the entries ``near`` by sums of the power series of the Riccati equation in time."""
    shape = np.shape(found.b_value)
    q, b, c, t, kt, v = (np.broadcast_to(a, shape)[near] for a in (q, b, sigma2, tau, kappa_theta, v0))
    beta, gamma = b * t, c * t * t
    zero = np.zeros_like(q)
    h, hb, hg = [zero, 0.5 * q], [zero, zero], [zero, zero]
    for n in range(1, _TERMS):
        square, cross_b, cross_g = zero, zero, zero
        for i in range(1, n):
            square = square + h[i] * h[n - i]
            cross_b = cross_b + h[i] * hb[n - i]
            cross_g = cross_g + h[i] * hg[n - i]
        h.append((-beta * h[n] + 0.5 * gamma * square) / (n + 1.0))
        hb.append((-h[n] - beta * hb[n] + gamma * cross_b) / (n + 1.0))
        hg.append((0.5 * square - beta * hg[n] + gamma * cross_g) / (n + 1.0))
    a_by_b = t**3 * sum(value / (n + 1.0) for n, value in enumerate(hb))
    a_by_c = t**4 * sum(value / (n + 1.0) for n, value in enumerate(hg))
    b_by_b, b_by_c = t**2 * sum(hb), t**3 * sum(hg)

    def merged(old: Any, new: Any) -> Any:
        out = np.array(np.broadcast_to(old, shape))
        out[near] = new
        return out

    return _Slopes(
        merged(found.b_value, t * sum(h)),
        merged(found.a_by_b, a_by_b),
        merged(found.a_by_c, a_by_c),
        merged(found.b_by_b, b_by_b),
        merged(found.b_by_c, b_by_c),
        merged(found.size_by_b, 64.0 * (kt * np.abs(a_by_b) + v * np.abs(b_by_b))),
        merged(found.size_by_c, 64.0 * (kt * np.abs(a_by_c) + v * np.abs(b_by_c))),
    )
