"""Bates (1996): Heston's diffusion with Merton's jumps, independent of it.

``log phi`` is the sum of Heston's (``engine.models.heston``) and of the compensated jumps' (``engine.models.jumps``);
so are the envelopes, since the moduli multiply. The strip is Heston's: lognormal jumps have all moments.

Source: D. Bates, "Jumps and stochastic volatility: exchange rate processes implicit in Deutsche Mark options", Review
of Financial Studies 9(1), 1996.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from engine.arrays import Complexes, Floats
from engine.models.heston import HESTON_PARAMETERS, Heston
from engine.models.jumps import JUMP_PARAMETERS, jump_envelope, jump_exponent, jump_variance
from engine.models.parameters import Columns
from engine.protocols import CfGradient, ParameterSpec

__all__ = ["Bates"]


@dataclass(frozen=True, slots=True)
class Bates(Columns):
    """Bates's model. Parameters: floats, or columns of shape (rows, 1) after ``stack``."""

    v0: Any
    kappa: Any
    theta: Any
    sigma: Any
    rho: Any
    jump_intensity: Any
    jump_mean: Any
    jump_stdev: Any

    name: ClassVar[str] = "bates"
    title: ClassVar[str] = "Bates stochastic volatility with jumps"
    source: ClassVar[str] = "D. Bates, Review of Financial Studies 9(1), 1996"
    parameters: ClassVar[tuple[ParameterSpec, ...]] = (*HESTON_PARAMETERS, *JUMP_PARAMETERS)
    sensitivity_names: ClassVar[tuple[str, ...]] = tuple(spec.name for spec in (*HESTON_PARAMETERS, *JUMP_PARAMETERS))

    @property
    def _heston(self) -> Heston:
        return Heston(self.v0, self.kappa, self.theta, self.sigma, self.rho)

    @property
    def _jumps(self) -> dict[str, Any]:
        return {"intensity": self.jump_intensity, "mean": self.jump_mean, "stdev": self.jump_stdev}

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``, shape of ``z`` broadcast with the parameters. ``tau`` in years, > 0."""
        heston = self._heston.log_cf(z, tau, along_path=along_path)
        return heston + jump_exponent(1j * z, tau, **self._jumps).log_value

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error in units of machine epsilon."""
        value, size = self._heston.log_cf_sized(z, tau, along_path=along_path)
        jumps = jump_exponent(1j * z, tau, **self._jumps)
        return value + jumps.log_value, size + 4.0 * jumps.size

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` and the derivatives by the parameters and tau."""
        heston = self._heston.log_cf_gradient(z, tau, along_path=along_path)
        jumps = jump_exponent(1j * z, tau, **self._jumps, gradient=True)
        assert jumps.gradient is not None and jumps.gradient_size is not None
        gradient = np.concatenate([heston.gradient[:5], jumps.gradient])
        sizes = np.concatenate([heston.gradient_size[:5], 8.0 * jumps.gradient_size])
        gradient[-1] += heston.gradient[5]
        sizes[-1] += heston.gradient_size[5]
        return CfGradient(heston.log_value + jumps.log_value, heston.size + 4.0 * jumps.size, gradient, sizes)

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)]`` for real ``p`` inside the strip."""
        return self._heston.log_moment(p, tau) + jump_envelope(p, np.zeros(()), tau, **self._jumps)

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """The sum of Heston's envelope and the jumps', both non-increasing in ``u``."""
        return self._heston.log_envelope(p, u, tau) + jump_envelope(p, u, tau, **self._jumps)

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """Heston's strip."""
        return self._heston.strip(tau, precise=precise)

    def mean_variance(self, tau: Floats | float) -> Floats:
        """Expected quadratic variation: of the diffusion and of the jumps."""
        return np.asarray(self._heston.mean_variance(tau) + jump_variance(tau, **self._jumps))

    def variance_weights(self) -> list[tuple[int, Any]]:
        """Heston's: the hedge ratio of the diffusive part."""
        return self._heston.variance_weights()

    def bend(self, tau: float) -> tuple[float, float]:
        """Heston's ``k_inf`` and the jumps' drift; lognormal jumps are bounded within 45 degrees of the real axis."""
        row = self.row(0)
        heston = Heston(*row[:5]).bend(tau)
        intensity, mean, stdev = row[5:]
        if intensity == 0.0:
            return heston
        return heston[0] - intensity * tau * float(np.expm1(mean + 0.5 * stdev**2)), 0.25 * np.pi
