"""Black's formula for the out-of-the-money side, to the last digits over the whole double range.

A put at ``k < 0`` is ``e^k`` times the call at ``-k``, so the value is ``min(1, e^k) c(|k|, s)`` with ``c = phi(d) E``
of ``engine.black.mills``: by the series near the money, as the complement of the gap well above the point of inflexion
(``s > sqrt(2 |k|)``), as the difference of Mills' ratios elsewhere. Relative error: a few units of rounding times the
condition number ``1 + |d ln value / d ln s| + |d ln value / d ln k|``, wherever the value is a normal double.

Reference: F. Black, "The pricing of commodity contracts", J. Financial Economics 3 (1976), equation (16).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from engine.arrays import Floats
from engine.black.mills import NEAR_DEVIATION, NEAR_MONEY, difference, difference_near, total

__all__ = ["log_otm_value", "otm_value"]

_ROOT_2PI = math.sqrt(2.0 * math.pi)
_GAP_SIDE = -0.3  # d below which 1 - g is the better form: away from the series c is then at least 0.3
_FAR = 1e4  # h above which E = 2 t / (d p) to 3 / h^2, and ln E is below 1e-6 of the logarithm of the value


def otm_value(k: ArrayLike, s: ArrayLike) -> Floats:
    """Undiscounted out-of-the-money Black value per unit forward: a call for ``k >= 0``, a put for ``k < 0``.

    ``k = ln(strike / forward)``, any; ``s = vol sqrt(expiry) >= 0``, the total deviation; shapes that broadcast against
    each other, which the result has. Zero at ``s = 0``, NaN where ``k`` or ``s`` is NaN or ``s < 0``."""
    k, s = np.broadcast_arrays(np.asarray(k, dtype=np.float64), np.asarray(s, dtype=np.float64))
    with np.errstate(all="ignore"):
        parts = _parts(np.ravel(np.abs(k)), np.ravel(s))
        c = np.exp(-0.5 * parts.d * parts.d) / _ROOT_2PI * parts.scaled
        c[parts.above] = 1.0 - c[parts.above]
        c = np.where(parts.none, np.where(np.isnan(parts.d), np.nan, 0.0), c).reshape(k.shape)
        return np.asarray(c * np.exp(np.minimum(k, 0.0)), dtype=np.float64)


def log_otm_value(k: ArrayLike, s: ArrayLike) -> Floats:
    """``ln(otm_value(k, s))``, finite where the value itself underflows; minus infinity at ``s = 0``. Same arguments;
    absolute error a few units of rounding times ``1 + |log_otm_value|``."""
    k, s = np.broadcast_arrays(np.asarray(k, dtype=np.float64), np.asarray(s, dtype=np.float64))
    with np.errstate(all="ignore"):
        parts = _parts(np.ravel(np.abs(k)), np.ravel(s))
        log_c = np.log(parts.scaled / _ROOT_2PI) - 0.5 * parts.d * parts.d
        log_c[parts.above] = np.log1p(-np.exp(log_c[parts.above]))
        log_c = np.where(parts.none, np.where(np.isnan(parts.d), np.nan, -np.inf), log_c).reshape(k.shape)
        return np.asarray(log_c + np.minimum(k, 0.0), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class _Parts:
    """``phi(d) scaled`` is the value, or the gap where ``above``; ``none`` where there is no time value at all."""

    d: Floats
    scaled: Floats
    above: np.ndarray
    none: np.ndarray


def _parts(a: Floats, s: Floats) -> _Parts:
    """Each point by the form that keeps its digits; (n,) arrays."""
    t = 0.5 * s
    h = np.where(a == 0.0, 0.0 * s, a / s)
    d, p = h - t, h + t
    none = ~(s > 0.0) | np.isinf(h)
    d = np.where(s >= 0.0, np.where(none & ~np.isnan(h), 0.0, d), np.nan)
    near = (a < NEAR_MONEY) & (t < NEAR_DEVIATION)
    above = ~near & (d < _GAP_SIDE)
    far = h > _FAR
    scaled = np.empty(a.shape)
    scaled[near] = difference_near(a[near], h[near], t[near])
    scaled[above] = total(d[above], p[above])
    rest = ~(near | above)
    scaled[rest] = difference(d[rest], p[rest])
    scaled[far] = s[far] / (d[far] * p[far])
    return _Parts(d, scaled, above, none)
