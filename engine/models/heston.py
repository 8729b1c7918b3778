"""Heston (1993): ``dv = kappa (theta - v) dt + sigma sqrt(v) dW``, correlation ``rho`` with the underlying.

Problem: ``log E[exp(i z X)]`` of ``X = ln(S_T / F)`` for complex ``z``, for every parameter in the box, ``sigma -> 0``
and ``v0 = 0`` included. The exponent is that of ``engine.models.variance_factor`` with ``w = i z``:
``q = w^2 - w``, ``b = kappa - rho sigma w``, ``D^2 = kappa^2 + w (sigma (sigma - 2 kappa rho) - sigma^2 (1 - rho^2)
w)``.

Envelope (our derivation). Conditional on the path of the variance, ``X`` is Gaussian with variance
``(1 - rho^2) I``, ``I = integral of v``; hence ``|phi(u - i p)| <= E[exp(p X) exp(-(1 - rho^2) u^2 I / 2)]``, which
decreases in ``u`` because ``I >= 0`` and has the same closed form with ``q = p^2 - p - (1 - rho^2) u^2`` and the real
``b = kappa - rho sigma p``.

Source: S. Heston, "A closed-form solution for options with stochastic volatility with applications to bond and
currency options", Review of Financial Studies 6(2), 1993.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from engine.arrays import Complexes, Floats
from engine.models.explosion import explosion_edges
from engine.models.parameters import Columns
from engine.models.variance_factor import FactorExponent, factor_exponent
from engine.models.variance_gradient import factor_gradient
from engine.protocols import CfGradient, ParameterSpec

__all__ = ["HESTON_PARAMETERS", "Heston"]

HESTON_PARAMETERS = (
    ParameterSpec("v0", "variance per year", 0.0, 10.0, "Initial variance (0.04 is a volatility of 20 %)."),
    ParameterSpec("kappa", "per year", 0.0, 100.0, "Speed of mean reversion of the variance."),
    ParameterSpec("theta", "variance per year", 0.0, 10.0, "Long-run variance."),
    ParameterSpec("sigma", "per year", 0.0, 20.0, "Volatility of variance ('vol of vol')."),
    ParameterSpec(
        "rho",
        "dimensionless",
        -1.0,
        1.0,
        "Correlation of the underlying with its variance.",
        lower_open=True,
        upper_open=True,
    ),
)


@dataclass(frozen=True, slots=True)
class Heston(Columns):
    """Heston's model. Parameters: floats, or columns of shape (rows, 1) after ``stack``."""

    v0: Any
    kappa: Any
    theta: Any
    sigma: Any
    rho: Any

    name: ClassVar[str] = "heston"
    title: ClassVar[str] = "Heston stochastic volatility"
    source: ClassVar[str] = "S. Heston, Review of Financial Studies 6(2), 1993"
    parameters: ClassVar[tuple[ParameterSpec, ...]] = HESTON_PARAMETERS
    sensitivity_names: ClassVar[tuple[str, ...]] = ("v0", "kappa", "theta", "sigma", "rho")

    def _riccati(self, w: Any, along_path: bool) -> tuple[Any, Any, Any]:
        """``q``, ``b`` and ``D^2``."""
        linear = self.sigma * (self.sigma - 2.0 * self.kappa * self.rho)
        square = self.sigma * self.sigma * self._rho_gap
        d2 = self.kappa * self.kappa + w * (linear - square * w)
        if along_path:  # where the path starts on the axis, D^2 < 0 is approached from the side the path goes to
            d2.imag = np.where(w.imag == 0.0, np.copysign(0.0, linear - 2.0 * square * w.real), d2.imag)
        return w * (w - 1.0), self.kappa - (self.rho * self.sigma) * w, d2

    def _exponent(self, w: Any, tau: Any, along_path: bool, sized: bool) -> FactorExponent:
        q, b, d2 = self._riccati(w, along_path)
        return factor_exponent(
            q,
            b,
            d2,
            v0=self.v0,
            kappa=self.kappa,
            theta=self.theta,
            sigma=self.sigma,
            tau=tau,
            along_path=along_path,
            sized=sized,
        )

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` and the derivatives by v0, kappa, theta, sigma, rho and tau."""
        w = 1j * z
        q, b, d2 = self._riccati(w, along_path)
        return factor_gradient(
            w,
            q,
            b,
            d2,
            v0=self.v0,
            kappa=self.kappa,
            theta=self.theta,
            sigma=self.sigma,
            rho=self.rho,
            tau=tau,
            along_path=along_path,
        )

    @property
    def _rho_gap(self) -> Any:
        return (1.0 - self.rho) * (1.0 + self.rho)

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``, shape of ``z`` broadcast with the parameters. ``tau`` in years, > 0."""
        return self._exponent(1j * z, tau, along_path, False).log_value

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error in units of machine epsilon."""
        exponent = self._exponent(1j * z, tau, along_path, True)
        return exponent.log_value, 8.0 * np.asarray(exponent.size)

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)]`` for real ``p`` inside the strip."""
        return np.asarray(self._exponent(p + 0j, tau, False, False).log_value.real)

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """Proven majorant of ``log |phi(u - i p)|``, non-increasing in ``u >= 0`` (module docstring)."""
        b = self.kappa - self.rho * self.sigma * p
        q = p * (p - 1.0) - self._rho_gap * u * u
        d2 = b * b - self.sigma**2 * q
        exponent = factor_exponent(
            q + 0j,
            b + 0j,
            d2 + 0j,
            v0=self.v0,
            kappa=self.kappa,
            theta=self.theta,
            sigma=self.sigma,
            tau=tau,
        )
        return np.asarray(exponent.log_value.real)

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """``(p_lo, p_hi)`` by the closed explosion time, from inside; infinite where no moment explodes."""
        return explosion_edges(kappa=self.kappa, sigma=self.sigma, rho=self.rho, tau=tau, precise=precise)

    def mean_variance(self, tau: Floats | float) -> Floats:
        """``E[integral of v over tau] = theta tau + (v0 - theta) (1 - exp(-kappa tau)) / kappa``, both parts >= 0."""
        kt = self.kappa * tau
        safe = np.maximum(kt, 1e-300)
        share = np.where(kt > 0.0, -np.expm1(-kt) / safe, 1.0)  # (1 - exp(-kt)) / kt
        late = np.where(kt < 1e-3, kt / 2.0 - kt * kt / 6.0 + kt**3 / 24.0, 1.0 - share)
        return np.asarray(self.v0 * tau * share + self.theta * tau * late)

    def variance_weights(self) -> list[tuple[int, Any]]:
        """The one factor: ``rho sigma``."""
        return [(0, self.rho * self.sigma)]

    def bend(self, tau: float) -> tuple[float, float]:
        """``k_inf = -rho (v0 + kappa theta tau) / sigma``; ``phi`` is analytic off the imaginary axis (Lucic 2007)."""
        v0, kappa, theta, sigma, rho = self.row(0)
        return -rho * (v0 + kappa * theta * tau) / max(sigma, 1e-150), 0.5 * np.pi
