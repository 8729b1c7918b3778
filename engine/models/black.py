"""Black (1976): the forward is a driftless lognormal with one volatility.

``log phi(z) = -(z^2 + i z) s^2 / 2`` with total variance ``s^2 = volatility^2 tau``; all moments exist; the modulus on
``z = u - i p`` is exactly ``exp(s^2 (p^2 - p - u^2) / 2)``, which is its own envelope.

Source: F. Black, "The pricing of commodity contracts", Journal of Financial Economics 3, 1976.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from engine.arrays import Complexes, Floats
from engine.models.parameters import Columns
from engine.protocols import CfGradient, ParameterSpec

__all__ = ["Black"]


@dataclass(frozen=True, slots=True)
class Black(Columns):
    """Black's model. ``volatility``: a float, or a column of shape (rows, 1) after ``stack``."""

    volatility: Any

    name: ClassVar[str] = "black"
    title: ClassVar[str] = "Black 1976 lognormal forward"
    source: ClassVar[str] = "F. Black, Journal of Financial Economics 3, 1976"
    parameters: ClassVar[tuple[ParameterSpec, ...]] = (
        ParameterSpec("volatility", "per square root of a year", 0.0, 10.0, "Volatility (0.2 is 20 %)."),
    )
    sensitivity_names: ClassVar[tuple[str, ...]] = ("volatility",)

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``; entire in ``z``, so paths need no care."""
        return np.asarray(-0.5 * self.mean_variance(tau) * (z * (z + 1j)))

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error in units of machine epsilon."""
        value = self.log_cf(z, tau)
        return value, 4.0 * np.abs(value)

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` and the derivatives by volatility and tau."""
        value, size = self.log_cf_sized(z, tau)
        square = -0.5 * (z * (z + 1j))
        gradient = np.stack(
            np.broadcast_arrays(2.0 * self.volatility * tau * square, self.volatility * self.volatility * square)
        )
        return CfGradient(value, size, gradient, 4.0 * np.abs(gradient))

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)] = s^2 p (p - 1) / 2``."""
        return np.asarray(0.5 * self.mean_variance(tau) * (p * (p - 1.0)))

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """``log |phi(u - i p)|`` exactly."""
        return np.asarray(0.5 * self.mean_variance(tau) * (p * (p - 1.0) - u * u))

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """All moments exist: ``(-inf, inf)``."""
        shape = np.broadcast_shapes(np.shape(self.volatility), np.shape(tau))
        return np.full(shape, -np.inf), np.full(shape, np.inf)

    def mean_variance(self, tau: Floats | float) -> Floats:
        """Total variance ``volatility^2 tau``."""
        return np.asarray(self.volatility * self.volatility * tau)

    def variance_weights(self) -> list[tuple[int, Any]]:
        """No variance factor."""
        return []

    def bend(self, tau: float) -> tuple[float, float]:
        """No linear phase; bounded within 45 degrees of the real axis."""
        return 0.0, 0.25 * np.pi
