"""Black's formula for the out-of-the-money side, to the last digits over the whole double range.

With ``a = |k|``, ``h = a / s`` and ``t = s / 2`` the undiscounted value per unit forward is ``min(1, e^k) c`` with

    c = Phi(t - h) - e^a Phi(-t - h) = phi(h - t) [ Y(h - t) - Y(h + t) ],   Y(z) = Phi(-z) / phi(z)

(a put at ``k < 0`` is ``e^k`` times the call at ``-k``). ``Y`` is Mills' ratio, ``sqrt(pi / 2) erfcx(z / sqrt 2)``. From
``Y(z) = int_0^inf exp(-z u - u^2 / 2) du`` the difference is ``2 sum_j t^(2j+1) m_(2j+1)(h) / (2j+1)!`` with the positive
moments ``m_n(h) = int u^n exp(-h u - u^2 / 2) du``, which replaces the difference where that would cancel.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import erfcx, ndtr

from engine.arrays import Floats

__all__ = ["log_otm_value", "otm_value"]

_ROOT_HALF = np.sqrt(0.5)
_MILLS = np.sqrt(0.5 * np.pi)
_LOG_ROOT_2PI = 0.5 * np.log(2.0 * np.pi)


def otm_value(k: ArrayLike, s: ArrayLike) -> Floats:
    """Undiscounted out-of-the-money Black value per unit forward: a call for ``k >= 0``, a put for ``k < 0``.

    ``k = ln(strike / forward)`` and total deviation ``s = vol sqrt(expiry) >= 0``, shapes that broadcast."""
    return np.exp(log_otm_value(k, s))


def log_otm_value(k: ArrayLike, s: ArrayLike) -> Floats:
    """Logarithm of ``otm_value``, finite where the value itself underflows; minus infinity at ``s = 0``."""
    k, s = np.broadcast_arrays(np.asarray(k, dtype=np.float64), np.asarray(s, dtype=np.float64))
    a = np.abs(k)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
        h = np.where(a == 0.0, 0.0, a / s)
        t = 0.5 * s
        small = (a < 1.0) & (t < 0.3)
        log_c = np.empty(a.shape)
        d = h[~small] - t[~small]
        far = d < 0.0  # above the point of inflexion: erfcx grows like exp(d^2 / 2), the plain form does not
        y_difference = np.log(
            _MILLS * (erfcx(np.maximum(d, 0.0) * _ROOT_HALF) - erfcx((d + 2.0 * t[~small]) * _ROOT_HALF))
        )
        low = y_difference - 0.5 * d * d - _LOG_ROOT_2PI
        plain = np.log(ndtr(-d) - np.exp(a[~small]) * ndtr(-d - 2.0 * t[~small]))
        log_c[~small] = np.where(far, plain, low)
        hs, ts = h[small], t[small]
        log_c[small] = np.log(_series(hs, ts)) - 0.5 * (hs - ts) ** 2 - _LOG_ROOT_2PI
        log_c = np.where(s > 0.0, log_c, -np.inf)
        return np.where(np.isinf(h), -np.inf, log_c + np.minimum(k, 0.0))


def _series(h: Floats, t: Floats) -> Floats:
    terms = 21
    ratio = np.zeros((terms + 1, *h.shape))
    tail = np.zeros(h.shape)
    near = np.maximum(h, 1e-3)
    for n in range(400 if h.size and h.min() < 1.0 else 100, 0, -1):
        tail = n / (near + tail)
        if n <= terms:
            ratio[n] = tail
    m = _MILLS * erfcx(h * _ROOT_HALF)
    first = np.where(h < 1.0, 1.0 - h * m, m * ratio[1])
    moments = [m, first]
    for n in range(2, terms + 1):
        moments.append(np.where(h < 1.0, (n - 1) * moments[n - 2] - h * moments[n - 1], moments[n - 1] * ratio[n]))
    total = np.zeros(h.shape)
    power = 2.0 * t
    for n in range(1, terms + 1, 2):
        total += power * moments[n]
        power = power * t * t / ((n + 1) * (n + 2))
    return total
