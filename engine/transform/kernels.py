"""Payoff kernels: what multiplies the characteristic function, and what is known about the sum that results.

With ``z = u - i p`` (so ``i z = p + i u``) a row computes ``exp((shift - p) k) / pi * Re sum h exp(-i u k) psi(u)``:

* vanilla, ``shift = 1``: ``psi = phi(z) / (i z (i z - 1))``: the call for ``p > 1``, the put for ``p < 0``,
  ``-E[min(S_T, K)] / F`` between (Lewis 2001; Lee 2004);
* digital, ``shift = 0``: ``psi = phi(z) / (i z)``: ``P(X > k)`` for ``p > 0``, ``-P(X < k)`` for ``p < 0``.

Aliases, by Poisson summation: the trapezoidal sum with period ``L`` is ``sum_m exp((p - shift) L m) V_p(k + m L)``. Far on
the in-the-money side ``V_p`` is its intrinsic value plus an out-of-the-money tail; the intrinsic parts are geometric
series, ``exact_aliases``. The tails are bounded by moments (``engine.transform.moments``).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Floats

__all__ = ["DIGITAL", "VANILLA", "Kernel"]


@dataclass(frozen=True, slots=True)
class Kernel:
    """``shift`` as above; ``power``: ``|psi| <= |phi| / u^power``; ``capped``: whether tails carry ``c(x) < 1``."""

    name: str
    shift: float
    power: int
    capped: bool

    def factor(self, iz: Any) -> Any:
        """``psi / phi`` at ``i z``."""
        return 1.0 / (iz * (iz - 1.0)) if self.power == 2 else 1.0 / iz

    def exact_aliases(self, p: Any, period: Any, growth: Any) -> Floats:
        """The closed-form part of the aliases. ``growth = exp(k)`` of each strike; arrays broadcast."""
        q_p = np.exp(-np.abs(p) * period)
        geometric_p = q_p / -np.expm1(-np.abs(p) * period)
        if self.power == 1:
            return np.asarray(np.where(p > 0.0, geometric_p, -geometric_p))
        a = np.abs(p - 1.0) * period
        geometric_a = np.exp(-a) / -np.expm1(-a)
        wings = geometric_a - growth * geometric_p
        between = -geometric_a - growth * geometric_p
        return np.asarray(np.where(p > 1.0, wings, np.where(p < 0.0, -wings, between)))


VANILLA = Kernel("vanilla", 1.0, 2, True)
DIGITAL = Kernel("digital", 0.0, 1, False)
