"""First guesses of the total deviation ``s`` from ``a = |k|`` and the value ``c`` per unit of ``min(forward, strike)``.

From a table (``from_table``; below the point of inflexion, ``a`` up to a few units). For ``t = s / 2 -> 0`` at fixed
``h = a / s`` Black's formula becomes that of a normally distributed price, with ``b = c e^(-a/2)`` and
``M(h) = 1 - h Y(h)``: ``b -> s phi(h) M(h)``. With

    z = sqrt(2 ln(1 + a / (b sqrt(2 pi))))        so that        exp(z^2 / 2) - 1 = h exp(h^2 / 2) / M(h),

``h`` is a smooth function of ``z`` alone (``z^2 / 2`` at small, ``z`` at large ``z``), tabulated as
``h (2 + z) / z^2``. What a finite ``t`` does is known at both ends. To order ``t^2`` (``engine.black.mills``) it
changes the solution ``h`` at given ``z`` by the factor ``1 - r^2 kappa(h) / 8`` with ``r = a / h`` and
``kappa = (1 - h^2 M) / 3``. For large ``h``, on the other hand, ``b ~ exp(-(h^2 + t^2) / 2)``: what ``z`` gives is
``H = sqrt(h^2 + t^2)``, and as ``h t = a / 2`` exactly, ``h = H sqrt((1 + sqrt(1 - q)) / 2)`` with
``q = r^2 / H^2`` and ``r = a / H``. Since ``kappa -> 1 / h^2`` for large ``h``, this one formula with
``q = r^2 kappa`` does both. What it still lacks is of order ``q^2``, with a factor of about 0.02 that again depends on
``z`` alone at small ``t``; it is taken from Black's formula at one small ``q``. Relative error: below 3e-5 for
``s < 0.6``, some per cent at ``s = 3``.

From the normal quantile (``from_quantile``; elsewhere). With ``R = Y(p) / Y(|d|)`` and ``p^2 = d^2 + 2 a``, it holds
exactly that ``c = Phi(-d) (1 - R)`` and ``1 - c = Phi(d) (1 + R)``. ``R`` varies slowly: it is taken from a first
estimate of ``|d|`` with ``Y(z) ~ pi / ((pi - 1) z + sqrt(z^2 + 2 pi))``, then ``d`` from the quantile, ``s = p - d``.

Sources: L. Bachelier, "Theorie de la speculation" (1900), for the limit; A. V. Boyd, "Inequalities for Mills' ratio",
Rep. Statist. Appl. Res. 6 (1959), for the approximation of ``Y`` (from memory); the join of the limits is derived here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy.special import ndtri

from engine.arrays import Floats
from engine.black.formula import log_otm_value
from engine.black.mills import difference_near

__all__ = ["from_quantile", "from_table"]

_LOG_ROOT_2PI = 0.5 * math.log(2.0 * math.pi)
_AT_MONEY = 1e-15  # a / c that stands in for less, down to a = 0: h is then 4e-16 and s = c sqrt(2 pi)
_PER_UNIT = 100  # nodes per unit of z: linear interpolation is then within 5e-6
_BEND_AT = 0.07  # q at which the bend is taken: s = 0.46 at the money
_Z_END = 40.0  # the smallest double and a = 4 give z = 38.7


def from_table(a: Floats, c: Floats, log_c: Floats) -> Floats:
    """Guess from ``a`` in [0, 4], ``c`` and ``ln c``, below or little above the point of inflexion; arrays (n,)."""
    table = _table()
    a = np.maximum(a, _AT_MONEY * c)
    u = np.log(a)
    u -= log_c
    u -= _LOG_ROOT_2PI
    u += 0.5 * a
    z2 = np.logaddexp(0.0, u)
    z2 *= 2.0
    z = np.sqrt(z2)
    place = z * _PER_UNIT
    node = place.astype(np.intp)
    place -= node
    ratio = table.slope[node]
    ratio *= place
    ratio += table.ratio[node]
    r = a * (2.0 + z)
    r /= ratio
    r /= z2
    q = r * r
    q *= table.kappa[node]
    np.minimum(q, 1.0, out=q)
    bend = table.bend[node]
    bend *= q
    bend *= q
    r *= _stretch(q) - bend
    return r


def from_quantile(a: Floats, chance: Floats, side: float) -> Floats:
    """Guess from the value ``c`` (``side`` 1) or from the gap ``1 - c`` (``side`` -1); arrays (n,)."""
    a2 = a + a
    y = np.log(chance)
    y *= -2.0
    np.sqrt(y, out=y)
    ratio = _reciprocal(y)
    ratio /= _reciprocal(np.sqrt(y * y + a2))
    ratio *= -side
    ratio += 1.0
    d = ndtri(chance / ratio)
    d *= -side
    p = np.sqrt(d * d + a2)
    return a2 / (p + d) if side > 0.0 else p - d


def _reciprocal(z: Floats) -> Floats:
    """``pi / Y(z)`` within one per cent."""
    return (math.pi - 1.0) * z + np.sqrt(z * z + 2.0 * math.pi)


def _stretch(q: Floats) -> Floats:
    """``s / r`` by the join of both limits."""
    out = np.sqrt(1.0 - q)
    out += 1.0
    out *= 0.5
    np.sqrt(out, out=out)
    return np.divide(1.0, out, out=out)


@dataclass(frozen=True, slots=True)
class _Table:
    """At ``z = i / _PER_UNIT``: ``ratio = h (2 + z) / z^2``, its forward difference; ``kappa`` and the factor ``bend``
    of ``q^2`` half a node on."""

    ratio: Floats
    slope: Floats
    kappa: Floats
    bend: Floats


@cache
def _table() -> _Table:
    """Made on first use (some ten milliseconds): ``z(h)`` on a fine grid of ``h``, inverted by interpolation."""
    h = np.exp(np.linspace(math.log(1e-14), math.log(1.1 * _Z_END), 20_000))
    t = 1e-9 / (1.0 + h)
    m = difference_near(2.0 * h * t, h, t) / (2.0 * t)
    kappa = (1.0 - h * h * m) / 3.0
    z = np.sqrt(2.0 * np.logaddexp(0.0, np.log(h) + 0.5 * h * h - np.log(m)))
    # the same for quotes of a finite s, to see what the join leaves of s / r
    s = np.sqrt(_BEND_AT / kappa)
    log_b = log_otm_value(h * s, s) - 0.5 * h * s
    z_s = np.sqrt(2.0 * np.logaddexp(0.0, np.log(h * s) - log_b - _LOG_ROOT_2PI))
    r = h * s / np.interp(z_s, z, h)
    q = r * r * np.interp(z_s, z, kappa)
    bend = (_stretch(q) - s / r) / (q * q)
    nodes = np.arange(math.ceil(_Z_END * _PER_UNIT) + 2) / _PER_UNIT
    between = nodes + 0.5 / _PER_UNIT
    ratio = np.interp(nodes, z, h * (2.0 + z) / (z * z))
    return _Table(ratio, np.diff(ratio, append=ratio[-1]), np.interp(between, z, kappa), np.interp(between, z_s, bend))
