"""Kernels: what multiplies the characteristic function, and what is known about the sum that results.

With ``z = u - i p`` (so ``i z = p + i u``) a row computes ``W(k) = exp((shift - p) k) / pi * Re sum h exp(-i u k)
psi(u)``, ``psi = phi(z) factor(i z)``, or ``psi = phi(z) factor(i z) d log phi / d parameter``:

    kernel         shift  factor             W for p > 1        0 < p < 1              p < 0
    vanilla          1    1/(iz (iz - 1))    call               -E[min(e^X, e^k)]      put
    digital          0    1/iz               P(X > k)           P(X > k)               -P(X < k)
    share digital    1    1/(iz - 1)         E[e^X; X > k]      -E[e^X; X < k]         -E[e^X; X < k]
    density          0    1                  f(k)               f(k)                   f(k)
    density slope    0    -iz                f'(k)              f'(k)                  f'(k)

all per unit forward and undiscounted (Lewis 2001; Lee 2004). The share digital is the forward delta, the density gives
gamma: with ``C = F c(ln K/F)``, ``dC/dF = E[e^X; X > k]`` and ``F d2C/dF2 = e^k f(k)``. A kernel with a parameter
differentiates under the integral; ``d log phi`` vanishes at ``i z = 0`` and ``1``, so its poles are removable.

Aliases, by Poisson summation: the trapezoidal sum with period ``L`` is ``sum_m exp((p - shift) L m) W(k + m L)``. Far
on the in-the-money side a vanilla is its intrinsic value and a digital is 1, plus a tail; those parts are geometric
series, ``exact_aliases``. What is left are tails (``engine.transform.bounds``).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from engine.arrays import Floats

__all__ = ["DENSITY", "DENSITY_SLOPE", "DIGITAL", "SHARE_DIGITAL", "VANILLA", "Kernel"]


@dataclass(frozen=True, slots=True)
class Kernel:
    """``shift`` as above; ``factor`` decays like ``u^-order``; ``parameter``: which derivative of ``log phi``
    multiplies it, in the order of the model's gradient, or None."""

    name: str
    shift: float
    order: int
    parameter: int | None = None
    growth: int = 0

    def by(self, parameter: int, growth: int = 2) -> Kernel:
        """The same kernel for the derivative by a parameter, which grows at most like ``|z|^growth``."""
        return replace(self, parameter=parameter, growth=growth)

    @property
    def power(self) -> int:
        """``|psi| <= const |phi| / u^power``."""
        return self.order - self.growth

    @property
    def markov(self) -> bool:
        """Whether moments bound its tails: a vanilla or a digital itself, not a derivative."""
        return self.parameter is None and self.order > 0

    def factor(self, iz: Any) -> Any:
        """``psi / phi`` at ``i z``, the derivative apart."""
        if self.order == 2:
            return 1.0 / (iz * (iz - 1.0))
        if self.order == 1:
            return 1.0 / (iz - self.shift)
        return np.ones_like(iz) if self.order == 0 else -iz

    def exact_aliases(self, p: Floats, period: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """The closed-form part of the aliases of each row, ``flat + e^k growing``, and the caps on the rounding of
        the two coefficients in units of machine epsilon: ``(flat, growing, flat cap, growing cap)``, shape of ``p``."""
        none = np.zeros_like(p)
        if not self.markov:
            return none, none, none, none
        if self.order == 1:
            geometric, size = _geometric(np.abs(p - self.shift) * period)
            return np.where(p > self.shift, geometric, -geometric), none, size, none
        by_p, size_p = _geometric(np.abs(p) * period)
        by_a, size_a = _geometric(np.abs(p - 1.0) * period)
        return np.where(p > 1.0, by_a, -by_a), np.where(p < 0.0, by_p, -by_p), size_a, size_p


def _geometric(far: Floats) -> tuple[Floats, Floats]:
    """``sum_{m >= 1} exp(-m far)`` and its rounding: the exponent's own and a few units."""
    value = np.exp(-far) / -np.expm1(-far)
    return value, value * (6.0 + far)


VANILLA = Kernel("vanilla", 1.0, 2)
DIGITAL = Kernel("digital", 0.0, 1)
SHARE_DIGITAL = Kernel("share_digital", 1.0, 1)
DENSITY = Kernel("density", 0.0, 0)
DENSITY_SLOPE = Kernel("density_slope", 0.0, -1)
