"""Derivatives of Black's undiscounted value per unit forward, in terms of ``k``, ``s`` and the expiry.

Problem. With ``v = V / (discount_factor forward)`` the value of a call or a put, ``d1 = -k / s + s / 2`` and
``d2 = d1 - s``, all of the following are closed forms in ``d1``, ``d2``, ``phi(d1)`` and ``sqrt(expiry)``; Greeks with
respect to spot, rates and time follow by the chain rule (``forward`` and ``discount_factor`` are functions of them),
e.g. at fixed spot ``S`` and yield ``dV/dr = -expiry strike discount_factor strike_delta``.

Trick. Volatility enters only as ``s = vol sqrt(expiry)``, so ``vol`` never stands in a denominator: vanna and volga
are written with ``k / s^2`` and stay finite at the money as ``s -> 0``; where the density underflows they are zero,
not ``0 inf``.

Reference: E. G. Haug, "The Complete Guide to Option Pricing Formulas" (2007), chapter 2 (formulas from memory; checked
against differentiation in multiple precision).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr

from engine.arrays import Floats

__all__ = ["BlackGreeks", "black_greeks"]

_ROOT_2PI = math.sqrt(2.0 * math.pi)


@dataclass(frozen=True, slots=True)
class BlackGreeks:
    """Columns of one shape. To get the Greeks of a price multiply by ``discount_factor`` and the power of the forward
    named.

    ``delta``: d/d(forward), times 1. ``strike_delta``: d/d(strike), times 1. ``gamma``: second derivative in the
    forward, times 1 / forward. ``vega``: d/d(vol) per 1.00 of volatility, times forward. ``vanna``: d delta/d(vol)
    per 1.00, times 1. ``volga``: second derivative in the volatility per 1.00 squared, times forward. ``decay``:
    minus d/d(expiry) per year at fixed forward, discount factor and volatility, times forward."""

    delta: Floats
    strike_delta: Floats
    gamma: Floats
    vega: Floats
    vanna: Floats
    volga: Floats
    decay: Floats


def black_greeks(k: ArrayLike, s: ArrayLike, expiry: ArrayLike, *, is_call: ArrayLike) -> BlackGreeks:
    """Greeks of calls (``is_call`` true) and puts at fixed strike and volatility ("sticky strike").

    ``k = ln(strike / forward)``; ``s = vol sqrt(expiry) >= 0``; ``expiry`` > 0 in years; shapes that broadcast. At
    ``s = 0`` the limits (``gamma`` is infinite at ``k = 0``); NaN where an argument is NaN. Relative error: a few
    units of rounding times ``1 + d1^2 + d2^2``."""
    k, s, expiry, call = np.broadcast_arrays(
        np.asarray(k, dtype=np.float64), np.asarray(s, dtype=np.float64), np.asarray(expiry), np.asarray(is_call)
    )
    root = np.sqrt(np.asarray(expiry, dtype=np.float64))
    sign = np.where(call, 1.0, -1.0)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
        ratio = np.where(k == 0.0, 0.0 * s, k / s)  # k / s, and 0 for 0 / 0
        slope = np.where(k == 0.0, 0.0 * s, ratio / s)
        d1, d2 = 0.5 * s - ratio, -0.5 * s - ratio
        density = np.exp(-0.5 * d1 * d1) / _ROOT_2PI
        vega = density * root
        return BlackGreeks(
            delta=sign * ndtr(sign * d1),
            strike_delta=-sign * ndtr(sign * d2),
            gamma=_or_zero(density, density / s),
            vega=vega,
            vanna=_or_zero(density, vega * (slope + 0.5)),
            volga=_or_zero(density, vega * root * (ratio * slope - 0.25 * s)),
            decay=_or_zero(density, -0.5 * density * s / expiry),
        )


def _or_zero(density: Floats, product: Floats) -> Floats:
    """The product, and zero where the density has underflown: whatever multiplies it grows more slowly."""
    return np.where(density == 0.0, 0.0, product)
