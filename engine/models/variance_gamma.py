"""Variance Gamma (Madan, Carr and Chang 1998): Brownian motion with drift, run on a gamma clock of variance rate
``nu``.

``log phi(z) = w omega tau - (tau / nu) log(1 + x)``, ``w = i z``, ``x = -nu w (theta + sigma^2 w / 2)``,
``omega = log(1 - theta nu - sigma^2 nu / 2) / nu``.

With ``p+-`` the roots of ``1 - theta nu p - sigma^2 nu p^2 / 2``, ``1 + x = (1 - w / p+)(1 - w / p-)``: the strip is
``(p-, p+)``, the forward exists only if ``p+ > 1``, and on ``z = u - i p`` each factor's modulus grows with ``u``, so
``|phi|`` is its own envelope. It decays like ``u^(-2 tau / nu)`` only; short expiries go through the deformed
contour. Off the imaginary axis the arguments of the two factors have opposite signs and their sum stays within (-pi,
pi): the principal logarithm is the continuous one on every path here. Small ``nu`` is smooth: ``log1p``, and ``d log
phi / d nu = (tau / nu^2)(h(x) - w h(m))`` with ``h(x) = log(1+x) - x/(1+x)`` by its series, ``m = -nu (theta +
sigma^2 / 2)``.

Source: D. Madan, P. Carr, E. Chang, "The variance gamma process and option pricing", European Finance Review 2, 1998.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from engine.arrays import EPS, Complexes, Floats
from engine.errors import InputError
from engine.models.parameters import Columns, check_parameters
from engine.models.variance_factor import log1p
from engine.protocols import CfGradient, ParameterSpec

__all__ = ["VarianceGamma"]

_LEAST_MARGIN = 1e-6  # of 1 - theta nu - sigma^2 nu / 2: nearer to 0 the forward all but diverges


@dataclass(frozen=True, slots=True)
class VarianceGamma(Columns):
    """The Variance Gamma model. Parameters: floats, or columns of shape (rows, 1) after ``stack``."""

    sigma: Any
    theta: Any
    nu: Any

    name: ClassVar[str] = "variance_gamma"
    title: ClassVar[str] = "Variance Gamma"
    source: ClassVar[str] = "D. Madan, P. Carr, E. Chang, European Finance Review 2, 1998"
    parameters: ClassVar[tuple[ParameterSpec, ...]] = (
        ParameterSpec("sigma", "per square root of a year", 0.001, 5.0, "Volatility of the Brownian motion."),
        ParameterSpec("theta", "per year", -5.0, 5.0, "Drift of the Brownian motion; its sign is that of the skew."),
        ParameterSpec("nu", "years", 1e-4, 20.0, "Variance rate of the gamma clock."),
    )
    sensitivity_names: ClassVar[tuple[str, ...]] = ("sigma", "theta", "nu")
    gradient_growth: ClassVar[int] = 1  # logarithms, and the drift's |z|

    def check(self) -> None:
        """Raise InputError for a parameter outside its range or a forward that does not exist."""
        check_parameters(self, self.parameters)
        margin = 1.0 - self.nu * (self.theta + 0.5 * self.sigma * self.sigma)
        if margin < _LEAST_MARGIN:
            raise InputError(
                "model.nu",
                f"is {float(self.nu)!r}: 1 - theta nu - sigma^2 nu / 2 is {float(margin):.6g}, and no forward exists",
                allowed=f"1 - theta nu - sigma^2 nu / 2 >= {_LEAST_MARGIN:g}",
            )

    def _one_plus(self, w: Any) -> tuple[Any, Any]:
        """``x`` and ``1 + x`` as a product, without cancellation near either root."""
        low, high = self._roots()
        x = -self.nu * w * (self.theta + (0.5 * self.sigma * self.sigma) * w)
        return x, (1.0 - w / high) * (1.0 - w / low)

    def _roots(self) -> tuple[Any, Any]:
        square = self.sigma * self.sigma
        root = np.sqrt(self.theta * self.theta + 2.0 * square / self.nu)
        far = np.abs(self.theta) + root
        near = (2.0 / self.nu) / far
        up = self.theta >= 0.0
        return -np.where(up, far / square, near), np.where(up, near, far / square)

    @property
    def _m(self) -> Any:
        return -self.nu * (self.theta + 0.5 * self.sigma * self.sigma)

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``; the principal logarithm is continuous on every path off the imaginary axis."""
        return self.log_cf_sized(z, tau)[0]

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error in units of machine epsilon."""
        w = 1j * z
        x, one_x = self._one_plus(w)
        rate = tau / self.nu
        drift = w * (rate * np.log1p(self._m))
        gamma = rate * log1p(x, one_x, False)
        low, high = self._roots()
        near_edge = np.abs(w / (high - w)) + np.abs(w / (low - w))  # what rounding of a root does to its logarithm
        size = np.abs(drift) + np.abs(gamma) + rate * (near_edge + np.abs(w) * self._forward_condition)
        return drift - gamma, 4.0 * size

    @property
    def _forward_condition(self) -> Any:
        """``|m| / (1 + m)``: what rounding of ``m`` does to ``log(1 + m)``."""
        return np.abs(self._m) / (1.0 + self._m)

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` and the derivatives by sigma, theta, nu and tau."""
        w = 1j * z
        value, size = self.log_cf_sized(z, tau)
        x, one_x = self._one_plus(w)
        margin = 1.0 + self._m
        shape = (4, *np.shape(value))
        gradient = np.empty(shape, dtype=np.complex128)
        sizes = np.empty(shape)
        near = 1.0 / one_x
        gradient[0] = (self.sigma * tau) * w * (w * near - 1.0 / margin)
        gradient[1] = tau * w * (near - 1.0 / margin)
        scale = tau / (self.nu * self.nu)
        h_x, h_m = _h(x, one_x), np.real(_h(np.asarray(self._m + 0j), np.asarray(margin + 0j)))
        gradient[2] = scale * (h_x - w * h_m)
        gradient[3] = value / tau
        near_edge = 1.0 + np.abs(x) * np.abs(near)
        modulus = tau * np.abs(w) * (np.abs(near) * near_edge + (1.0 + self._forward_condition) / margin)
        sizes[0] = self.sigma * (1.0 + np.abs(w)) * modulus
        sizes[1] = modulus
        sizes[2] = scale * (
            np.abs(h_x) * (4.0 + np.abs(x * near)) + np.abs(w * h_m) * (4.0 + self._forward_condition / margin)
        )
        sizes[3] = 0.25 * size / tau
        return CfGradient(value, size, gradient, 16.0 * sizes)

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)]`` for real ``p`` inside the strip."""
        return np.asarray(self.log_cf(np.asarray(-1j * p, dtype=np.complex128), tau).real)

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """``log |phi(u - i p)|``, with room for its own rounding."""
        low, high = self._roots()
        rate = tau / self.nu
        x = -self.nu * p * (self.theta + 0.5 * self.sigma * self.sigma * p)
        at_zero = np.where(
            np.abs(x) < 0.5, np.log1p(np.where(np.abs(x) < 0.5, x, 0.0)), np.log1p(-p / high) + np.log1p(-p / low)
        )
        far = np.log1p((u / (high - p)) ** 2) + np.log1p((u / (low - p)) ** 2)
        drift = p * np.log1p(self._m)
        slack = np.abs(drift) + np.abs(p) * self._forward_condition + np.abs(p / (high - p)) + np.abs(p / (low - p))
        return np.asarray(rate * (drift - at_zero - 0.5 * far + 16.0 * EPS * slack))

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """The roots, at any ``tau``."""
        low, high = self._roots()
        shape = np.broadcast_shapes(np.shape(low), np.shape(tau))
        inside = 1.0 - 8.0 * EPS
        return np.broadcast_to(low * inside, shape), np.broadcast_to(high * inside, shape)

    def mean_variance(self, tau: Floats | float) -> Floats:
        """Variance of the log price: ``(sigma^2 + theta^2 nu) tau``."""
        return np.asarray((self.sigma * self.sigma + self.theta * self.theta * self.nu) * tau)

    def variance_weights(self) -> list[tuple[int, Any]]:
        """No variance factor."""
        return []

    def bend(self, tau: float) -> tuple[float, float]:
        """``k_inf = omega tau``; ``phi`` is analytic off the imaginary axis and decays there."""
        sigma, theta, nu = self.row(0)
        return tau * float(np.log1p(-nu * (theta + 0.5 * sigma * sigma))) / nu, 0.5 * np.pi


def _h(x: Any, one_x: Any) -> Any:
    """``log(1 + x) - x / (1 + x)``, by its series ``x^2/2 - 2 x^3/3 + 3 x^4/4 - ...`` where ``x`` is small."""
    small = np.abs(x) < 0.05
    t = np.where(small, x, 0.0)
    series = np.zeros_like(t)
    for n in range(14, 1, -1):  # sum over n >= 2 of (-1)^n (n - 1) x^n / n
        series = series * t + ((n - 1.0) / n if n % 2 == 0 else -(n - 1.0) / n)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(small, series * t * t, log1p(x, one_x, False) - x / one_x)
