"""Merton (1976): Black's diffusion with lognormal jumps at Poisson times.

``log phi(z) = volatility^2 tau (w^2 - w) / 2 + lambda tau (J(w) - 1 - w (J(1) - 1))``, ``w = i z``,
``J = exp(mu w + delta^2 w^2 / 2)`` (``engine.models.jumps``). All moments exist.

Source: R. Merton, "Option pricing when underlying stock returns are discontinuous", Journal of Financial Economics 3,
1976.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from engine.arrays import Complexes, Floats
from engine.models.jumps import JUMP_PARAMETERS, jump_envelope, jump_exponent, jump_variance
from engine.models.parameters import Columns
from engine.protocols import CfGradient, ParameterSpec

__all__ = ["Merton"]


@dataclass(frozen=True, slots=True)
class Merton(Columns):
    """Merton's model. Parameters: floats, or columns of shape (rows, 1) after ``stack``."""

    volatility: Any
    jump_intensity: Any
    jump_mean: Any
    jump_stdev: Any

    name: ClassVar[str] = "merton"
    title: ClassVar[str] = "Merton jump diffusion"
    source: ClassVar[str] = "R. Merton, Journal of Financial Economics 3, 1976"
    parameters: ClassVar[tuple[ParameterSpec, ...]] = (
        ParameterSpec(
            "volatility", "per square root of a year", 0.0, 10.0, "Volatility of the diffusion (0.2 is 20 %)."
        ),
        *JUMP_PARAMETERS,
    )
    sensitivity_names: ClassVar[tuple[str, ...]] = ("volatility", "jump_intensity", "jump_mean", "jump_stdev")

    @property
    def _jumps(self) -> dict[str, Any]:
        return {"intensity": self.jump_intensity, "mean": self.jump_mean, "stdev": self.jump_stdev}

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``; entire in ``z``, so paths need no care."""
        return self.log_cf_sized(z, tau)[0]

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error in units of machine epsilon."""
        w = 1j * z
        diffusion = (0.5 * self.volatility * self.volatility * tau) * (w * (w - 1.0))
        jumps = jump_exponent(w, tau, **self._jumps)
        return diffusion + jumps.log_value, 4.0 * (np.abs(diffusion) + jumps.size)

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` and the derivatives by the parameters and tau."""
        w = 1j * z
        half = 0.5 * (w * (w - 1.0))
        square = self.volatility * self.volatility
        jumps = jump_exponent(w, tau, **self._jumps, gradient=True)
        assert jumps.gradient is not None and jumps.gradient_size is not None
        log_value = square * tau * half + jumps.log_value
        gradient = np.concatenate([(2.0 * self.volatility * tau * half)[None], jumps.gradient])
        sizes = np.concatenate([np.abs(gradient[:1]), jumps.gradient_size])
        gradient[-1] += square * half
        sizes[-1] += np.abs(square * half)
        return CfGradient(log_value, 4.0 * (np.abs(square * tau * half) + jumps.size), gradient, 8.0 * sizes)

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)]`` for real ``p``."""
        return self.log_envelope(p, np.zeros(()), tau)

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """The diffusion's modulus exactly, the jumps' by their envelope (``engine.models.jumps``)."""
        square = self.volatility * self.volatility
        return np.asarray(0.5 * square * tau * (p * (p - 1.0) - u * u) + jump_envelope(p, u, tau, **self._jumps))

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """All moments exist: ``(-inf, inf)``."""
        shape = np.broadcast_shapes(np.shape(self.volatility), np.shape(tau))
        return np.full(shape, -np.inf), np.full(shape, np.inf)

    def mean_variance(self, tau: Floats | float) -> Floats:
        """Expected quadratic variation: of the diffusion and of the jumps."""
        return np.asarray(self.volatility * self.volatility * tau + jump_variance(tau, **self._jumps))

    def variance_weights(self) -> list[tuple[int, Any]]:
        """No variance factor."""
        return []

    def bend(self, tau: float) -> tuple[float, float]:
        """The drift of the path without jumps; bounded within 45 degrees of the real axis."""
        volatility, intensity, mean, stdev = self.row(0)
        return -0.5 * volatility**2 * tau - intensity * tau * float(np.expm1(mean + 0.5 * stdev**2)), 0.25 * np.pi
