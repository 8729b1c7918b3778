"""Black's formula without its cancellations: the scaled value ``E`` from which price, gap and derivatives follow.

Problem. With ``a = |k|``, ``h = a / s``, ``t = s / 2``, ``d = h - t``, ``p = h + t`` the out-of-the-money value per
unit of ``min(forward, strike)`` is ``c = Phi(-d) - e^a Phi(-p)``, its gap to the upper bound
``g = 1 - c = Phi(d) + e^a Phi(-p)``. The terms of ``c`` can agree to many digits, and they can underflow.

Formula. ``e^a phi(p) = phi(d)``, so that with Mills' ratio ``Y(z) = Phi(-z) / phi(z) = sqrt(pi / 2) erfcx(z / sqrt 2)``

    c = phi(d) E,  E = Y(d) - Y(p)      and      g = phi(d) E,  E = Y(-d) + Y(p),

and since ``dc/ds = phi(d)``, the logarithmic derivatives are ``d ln c / ds = 1 / E`` and ``d ln g / ds = -1 / E``.

Near the money (``a < NEAR_MONEY``, ``t`` below about ``NEAR_DEVIATION``) the difference still cancels, by the factor
``Y / (2 t)``. From ``Y' = z Y - 1`` it is, exactly, with ``x = h t = a / 2``,

    E = 2 t exp(t^2 / 2) [ J - Y(h) h S ],  S = sinh(x) / x,  J = int_0^1 cosh(x (1 - v)) exp(-t^2 v^2 / 2) dv

and expanding the exponential (Beta integrals), ``J = S - sum_(j>=1) t^(2j) K_j(x)`` with

    K_j = (-1)^(j+1) (2j-1)!! sum_i x^(2i) / (2i+2j+1)!

so that the bracket is ``S (1 - h Y(h)) - sum_j t^(2j) K_j``. What cancels in ``1 - h Y(h)`` is a factor of about
``h^2 + 2``, the condition number of ``c`` in ``s`` itself. Elsewhere ``Y(d) - Y(p)`` loses at most ``max(3, h^2)``.

Reference: M. Abramowitz and I. Stegun (1964), 7.1.13 and 26.2.12, for Mills' ratio; the rest is derived here.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
from scipy.special import erfcx

from engine.arrays import Floats

__all__ = ["NEAR_DEVIATION", "NEAR_MONEY", "difference", "difference_near", "mills", "total"]

NEAR_MONEY = 1.0  # a below which, with t below NEAR_DEVIATION, the series replaces the difference
NEAR_DEVIATION = 0.5  # the series holds to t = 0.6: there the first term left out is below 1e-17 of the sum
_ROOT_HALF = math.sqrt(0.5)
_ROOT_HALF_PI = math.sqrt(0.5 * math.pi)
_X_TERMS = 8  # x^2 <= 1/4: x^16 / 17! = 4e-20; seven would leave x^14 / 15! = 5e-17
_T_TERMS = 10  # t^2 <= 0.36: 21!! t^22 / 23! = (t^2 / 2)^11 / (23 * 11!) = 7e-18


def mills(z: Floats) -> Floats:
    """``Phi(-z) / phi(z)``, to a few units of relative rounding; overflows below about -37."""
    out: Floats = erfcx(z * _ROOT_HALF)
    out *= _ROOT_HALF_PI
    return out


def difference(d: Floats, p: Floats) -> Floats:
    """``Y(d) - Y(p)``, where it does not cancel worse than the value's own condition."""
    return mills(d) - mills(p)


def total(d: Floats, p: Floats) -> Floats:
    """``Y(-d) + Y(p)``, for the gap; ``d <= 0`` or little above."""
    return mills(-d) + mills(p)


def difference_near(a: Floats, h: Floats, t: Floats) -> Floats:
    """``Y(h - t) - Y(h + t)`` by the series, for ``a = 2 h t < NEAR_MONEY`` and ``t`` up to 0.6."""
    x2 = a * a
    x2 *= 0.25
    powers = np.empty((_X_TERMS, x2.shape[0]))
    powers[0] = 1.0
    powers[1] = x2
    for i in range(2, _X_TERMS):
        np.multiply(powers[i - 1], x2, out=powers[i])
    rows = _coefficients() @ powers
    tt = t * t
    series = rows[-1] * tt
    for row in rows[-2:0:-1]:
        series += row
        series *= tt
    m = mills(h)
    m *= h
    np.subtract(1.0, m, out=m)
    m *= rows[0]
    m -= series
    m *= t
    tt *= 0.5
    m *= np.exp(tt)
    m *= 2.0
    return m


@cache
def _coefficients() -> Floats:
    """Row 0: those of ``S`` in powers of ``x^2``; row ``j``: those of ``K_j``."""
    out = np.empty((_T_TERMS + 1, _X_TERMS))
    for j in range(_T_TERMS + 1):
        odd = math.prod(range(1, 2 * j, 2))
        sign = -1.0 if j and j % 2 == 0 else 1.0
        out[j] = [sign * odd / math.factorial(2 * i + 2 * j + 1) for i in range(_X_TERMS)]
    return out
