"""Kou (2002): Black's diffusion with double-exponential jumps of the log price at Poisson times.

A jump is up with probability ``pi``, then exponential of rate ``a``, else down, exponential of rate ``b``:
``J(w) = E[exp(w Y)] = pi a / (a - w) + (1 - pi) b / (b + w)``, ``w = i z``. The forward exists only if ``a > 1``. With
the compensator that makes it a martingale,

    log phi(z) = volatility^2 tau (w^2 - w) / 2 + lambda tau (J(w) - 1 - w (J(1) - 1))
               = w (w - 1) tau (volatility^2 / 2 + lambda (pi A + (1 - pi) B))
               A = 1 / ((a - w)(a - 1)),   B = 1 / ((b + w)(b + 1))

The second line is the first with the zeros at ``w = 0`` and ``1`` divided out (two partial fractions; our own
rearrangement): nothing cancels in it near either, and derivatives by the rates keep the same factor. The strip is
``(-b, a)``, the poles of ``J``. ``phi`` is its own envelope: on ``z = u - i p`` inside the strip

    Re a / (a - w) = a (a - p) / ((a - p)^2 + u^2),   Re b / (b + w) = b (b + p) / ((b + p)^2 + u^2)

both fall in ``u >= 0``, as does the diffusion's ``-volatility^2 tau u^2 / 2``; everything else in ``log |phi|`` does
not depend on ``u``. It is written as the moment at ``u = 0`` less what falls, ``(a / (a - p)) r^2 / (1 + r^2)`` with
``r = u / (a - p)``.

Source: S. G. Kou, "A jump-diffusion model for option pricing", Management Science 48(8), 2002 (from memory, the paper
was not at hand for equation numbers).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from engine.arrays import Complexes, Floats
from engine.models.jumps import JUMP_PARAMETERS
from engine.models.parameters import Columns
from engine.protocols import CfGradient, ParameterSpec

__all__ = ["Kou"]


@dataclass(frozen=True, slots=True)
class Kou(Columns):
    """Kou's model. Parameters: floats, or columns of shape (rows, 1) after ``stack``."""

    volatility: Any
    jump_intensity: Any
    up_probability: Any
    up_rate: Any
    down_rate: Any

    name: ClassVar[str] = "kou"
    title: ClassVar[str] = "Kou double-exponential jump diffusion"
    source: ClassVar[str] = "S. G. Kou, Management Science 48(8), 2002"
    parameters: ClassVar[tuple[ParameterSpec, ...]] = (
        ParameterSpec(
            "volatility", "per square root of a year", 0.0, 10.0, "Volatility of the diffusion (0.2 is 20 %)."
        ),
        JUMP_PARAMETERS[0],
        ParameterSpec("up_probability", "none", 0.0, 1.0, "Share of the jumps that go up."),
        ParameterSpec(
            "up_rate",
            "per log of price",
            1.01,
            1e4,
            "Rate of the upward log jumps: one over their mean. At 1 and below no forward exists.",
        ),
        ParameterSpec(
            "down_rate", "per log of price", 0.01, 1e4, "Rate of the downward log jumps: one over their mean."
        ),
    )
    sensitivity_names: ClassVar[tuple[str, ...]] = tuple(spec.name for spec in parameters)

    def _parts(self, w: Any) -> tuple[Any, Any, Any, Any]:
        """``w (w - 1)``, ``a - w``, ``b + w`` and the probability of a jump down."""
        return w * (w - 1.0), self.up_rate - w, self.down_rate + w, 1.0 - self.up_probability

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``; rational in ``z``, so paths need no care."""
        return self.log_cf_sized(z, tau)[0]

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error in units of machine epsilon."""
        both, to_up, to_down, down = self._parts(1j * z)
        up_part = (self.jump_intensity * self.up_probability) / (to_up * (self.up_rate - 1.0))
        down_part = (self.jump_intensity * down) / (to_down * (self.down_rate + 1.0))
        half = 0.5 * self.volatility * self.volatility
        value = (both * tau) * (half + up_part + down_part)
        return value, 8.0 * (np.abs(both) * tau) * (half + np.abs(up_part) + np.abs(down_part))

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` and the derivatives by the parameters and tau."""
        value, size = self.log_cf_sized(z, tau)
        both, to_up, to_down, down = self._parts(1j * z)
        far_up, far_down = self.up_rate - 1.0, self.down_rate + 1.0
        up, lower = 1.0 / (to_up * far_up), 1.0 / (to_down * far_down)
        up_size, lower_size = np.abs(up), np.abs(lower)
        scaled = both * tau
        by_up = self.jump_intensity * self.up_probability * up
        by_down = self.jump_intensity * down * lower
        gradient = np.stack(
            np.broadcast_arrays(
                scaled * self.volatility,
                scaled * (self.up_probability * up + down * lower),
                scaled * self.jump_intensity * (up - lower),
                -scaled * by_up * (1.0 / to_up + 1.0 / far_up),
                -scaled * by_down * (1.0 / to_down + 1.0 / far_down),
                value / tau,
            )
        )
        modulus = np.abs(scaled)
        sizes = np.stack(
            np.broadcast_arrays(
                modulus * self.volatility,
                modulus * (self.up_probability * up_size + down * lower_size),
                modulus * self.jump_intensity * (up_size + lower_size),
                modulus * np.abs(by_up) * (1.0 / np.abs(to_up) + 1.0 / far_up),
                modulus * np.abs(by_down) * (1.0 / np.abs(to_down) + 1.0 / far_down),
                0.1 * size / tau,
            )
        )
        return CfGradient(value, size, gradient, 12.0 * sizes)

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)]`` for real ``p`` inside the strip."""
        both, to_up, to_down, down = self._parts(np.asarray(p))
        up_part = self.up_probability / (to_up * (self.up_rate - 1.0))
        down_part = down / (to_down * (self.down_rate + 1.0))
        half = 0.5 * self.volatility * self.volatility
        return np.asarray((both * tau) * (half + self.jump_intensity * (up_part + down_part)))

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """``log |phi(u - i p)|`` exactly, which falls in ``u``."""
        to_up, to_down = self.up_rate - p, self.down_rate + p
        up_fall = self.up_probability * (self.up_rate / to_up) * _fallen(u / to_up)
        down_fall = (1.0 - self.up_probability) * (self.down_rate / to_down) * _fallen(u / to_down)
        diffusion = 0.5 * (self.volatility * u) ** 2
        return np.asarray(self.log_moment(p, tau) - tau * (diffusion + self.jump_intensity * (up_fall + down_fall)))

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """The poles of the jump transform, at any ``tau``: ``(-down_rate, up_rate)``. Where nothing jumps to a
        side no more is claimed: the derivatives by intensity and share keep their pole there."""
        shape = np.broadcast_shapes(np.shape(self.up_rate), np.shape(tau))
        inside = 1.0 - 4e-15
        low, high = -self.down_rate * inside, 1.0 + (self.up_rate - 1.0) * inside
        return np.broadcast_to(low, shape), np.broadcast_to(high, shape)

    def mean_variance(self, tau: Floats | float) -> Floats:
        """Expected quadratic variation: of the diffusion and of the jumps."""
        up = self.up_probability / (self.up_rate * self.up_rate)
        down = (1.0 - self.up_probability) / (self.down_rate * self.down_rate)
        return np.asarray(tau * (self.volatility * self.volatility + 2.0 * self.jump_intensity * (up + down)))

    def variance_weights(self) -> list[tuple[int, Any]]:
        """No variance factor."""
        return []

    def bend(self, tau: float) -> tuple[float, float]:
        """The drift of the path without jumps. ``J`` dies out in every direction, so the diffusion alone sets the
        angle: 45 degrees from the real axis, or all of the right half plane where there is none."""
        volatility, intensity, share, up, down = self.row(0)
        compensator = share / (up - 1.0) - (1.0 - share) / (down + 1.0)
        return -tau * (0.5 * volatility**2 + intensity * compensator), (0.25 if volatility > 0.0 else 0.5) * np.pi


def _fallen(r: Any) -> Any:
    """``r^2 / (1 + r^2)`` for ``r >= 0`` up to the end of the double range."""
    share = r / np.hypot(1.0, r)
    return share * share
