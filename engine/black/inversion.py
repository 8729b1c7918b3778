"""Implied total deviation: the inverse of Black's formula in ``s = vol sqrt(expiry)`` at fixed ``k``, a status a quote.

Problem. Find ``s`` with ``c(a, s) = c`` for ``a = |k|``, to what the digits of ``c`` determine: over the double range
of prices neither ``c`` nor its derivative is a usable objective everywhere.

Method. The objective is ``f = ln(c(s) / c)`` below the point of inflexion (and near the money), ``f = ln(g(s) / g)``
above it, ``g = 1 - c`` being the gap to the upper bound. Both are ``phi(d) E`` of ``engine.black.mills``, and with the
first derivative ``e / s``, ``e = +-s / E``, and ``w = d p`` (as ``dc/ds = phi(d)``, ``dd/ds = -p / s``) the second and
third, relative to the first, are ``gamma / s`` and ``delta / s^2`` with

    gamma = w - e,      delta = gamma (gamma - e) - 3 h^2 - t^2,

so one evaluation carries three derivatives and Householder's third-order step (order of convergence four)

    s *= 1 + N (1 + gamma N / 2) / (1 + N (gamma + delta N / 6)),      N = -f / e.

The guesses of ``engine.black.guess`` leave ``|f|`` so small that one step is enough for most quotes and two for nearly
all: a quote steps again only if its ``|f|`` was above ``_ROUGH``. The logarithm is taken of the ratio, not of its
terms, so ``f`` keeps its digits where ``c`` is small without being steep in ``s``.

Reference: P. Jaeckel, "Let's be rational", Wilmott (2015), for the transformed objectives and the Householder step.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from engine.arrays import Bytes, Floats, Ints
from engine.black.guess import from_quantile, from_table
from engine.black.mills import NEAR_MONEY, difference, difference_near, total
from engine.status import Status

__all__ = ["BLOCK", "MAX_EVALUATIONS", "TotalDeviations", "normalised_deviation", "total_deviation"]

MAX_EVALUATIONS = 4
BLOCK = 4096  # quotes at a time: some twenty temporaries of this length stay in the second-level cache
_ROUGH = 5e-5  # a step leaves C |f|^4 of s, where C <= 0.07, and <= 7 just above the inflexion: below 5e-17
_TABLE_END = 4.0  # a from which the quantile gives the better guess
_SMALLEST = float(np.finfo(np.float64).tiny)  # below it a double has lost digits: no time value to speak of
_LEAST = 5e-324  # the smallest positive double
_WIDEST = 1e6  # no two doubles have a ratio beyond e^1455
_ROOT_2PI = math.sqrt(2.0 * math.pi)


@dataclass(frozen=True, slots=True)
class TotalDeviations:
    """``deviations`` float64, NaN where ``statuses`` uint8 (codes of ``Status``) is not OK and says why; same shape."""

    deviations: Floats
    statuses: Bytes


def total_deviation(k: ArrayLike, value: ArrayLike) -> TotalDeviations:
    """Total deviation ``s = vol sqrt(expiry)`` of undiscounted out-of-the-money values per unit forward.

    ``k = ln(strike / forward)``; ``value`` of the call for ``k >= 0``, of the put for ``k < 0``; shapes that broadcast.
    Accuracy: within 16 units of rounding times the condition number of ``s`` in ``value`` and ``k``. Statuses: OK;
    ZERO_TIME_VALUE at zero and below the smallest normal double (times ``min(1, e^k)``), BELOW_INTRINSIC under zero,
    ABOVE_MAXIMUM at or over ``min(1, e^k)``, NOT_FINITE (also ``|k| >= 1e6``, which no strike has)."""
    k, value = np.asarray(k, dtype=np.float64), np.asarray(value, dtype=np.float64)
    if k.shape != value.shape:
        k, value = np.broadcast_arrays(k, value)
    with np.errstate(all="ignore"):
        bound = np.maximum(np.exp(np.minimum(k, 0.0)), _LEAST)  # not 0, so that a zero value stays one
        return _deviations(np.abs(k), value / bound)


def normalised_deviation(a: Floats, c: Floats) -> TotalDeviations:
    """The same from ``a = |k|`` and the value ``c`` per unit of ``min(forward, strike)``, which needs no ``e^k``.
    Shapes alike."""
    with np.errstate(all="ignore"):
        return _deviations(a, c)


def _deviations(a: Floats, c: Floats) -> TotalDeviations:
    shape = a.shape
    a, c = a.ravel(), c.ravel()
    good = (c >= _SMALLEST) & (c < 1.0) & (a < _WIDEST)
    statuses = np.zeros(a.shape, dtype=np.uint8)
    if good.all():
        return TotalDeviations(_solve(a, c).reshape(shape), statuses.reshape(shape))
    statuses[c >= 1.0] = Status.ABOVE_MAXIMUM
    statuses[c < _SMALLEST] = Status.ZERO_TIME_VALUE
    statuses[c < 0.0] = Status.BELOW_INTRINSIC
    statuses[~((a < _WIDEST) & np.isfinite(c))] = Status.NOT_FINITE
    deviations = np.full(a.shape, np.nan)
    at = np.flatnonzero(good)
    deviations[at] = _solve(a[at], c[at])
    return TotalDeviations(deviations.reshape(shape), statuses.reshape(shape))


def _solve(a: Floats, c: Floats) -> Floats:
    """All quotes have a solution; block by block."""
    out = np.empty(a.shape)
    for begin in range(0, a.shape[0], BLOCK):
        end = begin + BLOCK
        out[begin:end] = _solve_block(a[begin:end], c[begin:end])
    return out


@dataclass(frozen=True, slots=True)
class _Quotes:
    """Quotes in the order near the money, elsewhere below the point of inflexion, above it (from ``gaps`` on), where
    ``target`` is the gap instead of the value."""

    a: Floats
    target: Floats
    near: int
    gaps: int

    def take(self, at: Ints) -> _Quotes:
        near, gaps = int(np.searchsorted(at, self.near)), int(np.searchsorted(at, self.gaps))
        return _Quotes(self.a[at], self.target[at], near, gaps)


def _solve_block(a: Floats, c: Floats) -> Floats:
    """Sort by region so that each is a slice, guess, refine, put back."""
    n = a.shape[0]
    log_c = np.log(c)
    near = log_c < -0.96 - a * (0.79 + 0.31 * a)  # t < 0.5: through ln c at t = 1/2 and a = 0, 1/2, 1
    near &= a < NEAR_MONEY
    root = np.sqrt(a)
    gap_side = c * (root + 0.886) > 0.5 * root  # c at d = 0 is (1 - erfcx(sqrt a)) / 2; 0.886 = sqrt(pi) / 2
    gap_side = gap_side > near
    quantile = a > _TABLE_END
    quantile |= gap_side
    ends = int(np.count_nonzero(near)), n - int(np.count_nonzero(quantile)), n - int(np.count_nonzero(gap_side))
    if all(end in (0, n) for end in ends):
        return _sorted_block(a, c, log_c, ends)
    region = quantile.view(np.int8) - near.view(np.int8)
    region += gap_side.view(np.int8)
    order = np.argsort(region, kind="stable")
    out = np.empty(n)
    out[order] = _sorted_block(a[order], c[order], log_c[order], ends)
    return out


def _sorted_block(a: Floats, c: Floats, log_c: Floats, ends: tuple[int, int, int]) -> Floats:
    """Guess slice by slice and refine together."""
    near, tables, gaps = ends
    target = c.copy()
    np.subtract(1.0, c[gaps:], out=target[gaps:])
    s = np.empty(a.shape)
    if tables:
        s[:tables] = from_table(a[:tables], c[:tables], log_c[:tables])
    if gaps > tables:
        s[tables:gaps] = from_quantile(a[tables:gaps], target[tables:gaps], 1.0)
    if gaps < a.shape[0]:
        s[gaps:] = from_quantile(a[gaps:], target[gaps:], -1.0)
    _refine(_Quotes(a, target, near, gaps), s, MAX_EVALUATIONS)
    return s


def _refine(quotes: _Quotes, s: Floats, evaluations: int) -> None:
    """Step all, then once more those whose error was still rough; ``s`` in place."""
    rough = np.abs(_step(quotes, s)) > _ROUGH
    if evaluations > 1 and rough.any():
        at = np.flatnonzero(rough)
        part = s[at]
        _refine(quotes.take(at), part, evaluations - 1)
        s[at] = part


def _step(quotes: _Quotes, s: Floats) -> Floats:
    """One evaluation of Black's formula and one Householder step, ``s`` in place; returns ``f`` at the old ``s``."""
    near, gaps = quotes.near, quotes.gaps
    h = quotes.a / s
    t = 0.5 * s
    d, p = h - t, h + t
    scaled = np.empty(s.shape)
    if near:
        scaled[:near] = difference_near(quotes.a[:near], h[:near], t[:near])
    if gaps > near:
        scaled[near:gaps] = difference(d[near:gaps], p[near:gaps])
    if gaps < s.shape[0]:
        scaled[gaps:] = total(d[gaps:], p[gaps:])
    f = d * d
    f *= -0.5
    np.exp(f, out=f)
    f *= scaled
    f /= _ROOT_2PI
    f /= quotes.target
    np.maximum(f, 1e-300, out=f)  # a density below the double range: a long step follows instead of a minus infinity
    np.log(f, out=f)
    e = s / scaled
    np.negative(e[gaps:], out=e[gaps:])
    s *= _householder(f, e, d * p, h, t)
    return f


def _householder(f: Floats, e: Floats, w: Floats, h: Floats, t: Floats) -> Floats:
    """The factor from ``s`` to the new ``s``, in the symbols of the module's docstring; uses ``w``, ``h``, ``t`` up."""
    w -= e  # gamma
    delta = w - e
    delta *= w
    h *= h
    h *= 3.0
    delta -= h
    t *= t
    delta -= t
    n = f / e
    np.negative(n, out=n)
    delta *= n
    delta /= 6.0
    delta += w
    delta *= n
    delta += 1.0
    w *= n
    w *= 0.5
    w += 1.0
    w *= n
    w /= delta
    w += 1.0
    return w
