"""Compound Poisson jumps of the log price, compensated so that the forward is a martingale.

With intensity ``lambda`` and jump transform ``J(w) = E[exp(w Y)]``, ``w = i z``, jumps add to ``log phi``

    lambda tau (J(w) - 1 - w (J(1) - 1))

Lognormal jumps (Merton 1976): ``J = exp(mu w + delta^2 w^2 / 2)``; on ``z = u - i p`` their modulus is exactly
``J(p) exp(-delta^2 u^2 / 2)``, so ``lambda tau (J(p) exp(-delta^2 u^2 / 2) - 1 - p (J(1) - 1))`` is an envelope of
their part. ``J - 1`` is built from expm1 and half-angle sines, so small jumps keep their digits.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Complexes, Floats
from engine.protocols import ParameterSpec

__all__ = ["JUMP_PARAMETERS", "JumpExponent", "jump_envelope", "jump_exponent", "jump_variance"]

JUMP_PARAMETERS = (
    ParameterSpec("jump_intensity", "per year", 0.0, 100.0, "Expected number of jumps in a year."),
    ParameterSpec("jump_mean", "log of price", -3.0, 3.0, "Mean of the log jump."),
    ParameterSpec("jump_stdev", "log of price", 0.0, 3.0, "Standard deviation of the log jump."),
)


@dataclass(frozen=True, slots=True)
class JumpExponent:
    """The exponent, the scale of its rounding error, and on request the derivatives by intensity, mean, standard
    deviation and ``tau`` (4, ...) with theirs."""

    log_value: Complexes
    size: Floats
    gradient: Complexes | None = None
    gradient_size: Floats | None = None


def jump_exponent(w: Any, tau: Any, *, intensity: Any, mean: Any, stdev: Any, gradient: bool = False) -> JumpExponent:
    """Lognormal jumps at complex ``w``; parameters broadcast."""
    off = np.asarray(intensity) == 0.0
    if off.any() and not gradient:  # 0 times what a huge jump would do is 0
        mean, stdev = np.where(off, 0.0, mean), np.where(off, 0.0, stdev)
    with np.errstate(over="ignore", invalid="ignore"):  # exp(lambda exp(...)) may leave the double range
        a = w * (mean + (0.5 * stdev * stdev) * w)
        less_one = _expm1(a)
        compensator = np.expm1(mean + 0.5 * stdev * stdev)
        shape = less_one - w * compensator
        rate = intensity * tau
        jump = 1.0 + less_one
        modulus = np.abs(jump)
        size = modulus * (1.0 + np.abs(a)) + np.abs(less_one) + np.abs(w) * (np.abs(compensator) + 1e-300)
        if not gradient:
            return JumpExponent(rate * shape, rate * size)
        slope = w * (jump - (1.0 + compensator))
        bend = stdev * w * (w * jump - (1.0 + compensator))
        scale = np.abs(w) * (modulus * (1.0 + np.abs(a)) + 1.0 + compensator)
        return JumpExponent(
            rate * shape,
            rate * size,
            np.stack(np.broadcast_arrays(tau * shape, rate * slope, rate * bend, intensity * shape)),
            np.stack(
                np.broadcast_arrays(
                    tau * size, rate * scale, rate * stdev * (1.0 + np.abs(w)) * scale, intensity * size
                )
            ),
        )


def jump_envelope(p: Any, u: Any, tau: Any, *, intensity: Any, mean: Any, stdev: Any) -> Floats:
    """Envelope of the real part of the exponent on ``z = u - i p``, non-increasing in ``u``."""
    square = stdev * stdev
    with np.errstate(over="ignore", invalid="ignore"):
        jump = np.exp(mean * p + 0.5 * square * (p * p - u * u))
        found = intensity * tau * (jump - 1.0 - p * np.expm1(mean + 0.5 * square))
    return np.where(intensity > 0.0, found, 0.0)


def jump_variance(tau: Any, *, intensity: Any, mean: Any, stdev: Any) -> Any:
    """Expected sum of squared jumps over ``tau``."""
    return intensity * tau * (mean * mean + stdev * stdev)


def _expm1(a: Any) -> Any:
    """Complex ``exp(a) - 1`` to relative accuracy."""
    with np.errstate(over="ignore", invalid="ignore"):
        growth = np.expm1(a.real)
        half = 0.5 * a.imag
        sine = np.sin(half)
        twice = np.where(sine == 0.0, 0.0, (2.0 + 2.0 * growth) * sine)
        out = np.empty_like(a)
        out.real = growth - twice * sine
        out.imag = twice * np.cos(half)
    return out
