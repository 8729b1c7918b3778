"""A short self-test of the engine against published prices: at start, before the service calls itself ready, and in
``smilewright check``.

Source of the prices: A. Lewis, "Heston Model Reference Prices", 15 February 2019 (his theta is kappa here, his omega
kappa * theta); calls, spot 100, one year, rate 1 %, dividend yield 2 %.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from time import perf_counter
from typing import Final

import numpy as np

from engine import MODELS, Payoff, Slice, price_smiles

__all__ = ["SelfTest", "run_self_test"]

_PUBLISHED: Final = {
    80.0: "26.774758743998854221382195325726949201687",
    90.0: "20.933349000596710388139445766564068085476",
    100.0: "16.070154917028834278213466703938231827658",
    110.0: "12.132211516709844867860534767549426052805",
    120.0: "9.024913483457835636553375454092357136489",
}
_PARAMETERS: Final = {"v0": 0.04, "kappa": 4.0, "theta": 0.25, "sigma": 1.0, "rho": -0.5}
_SPOT, _RATE, _YIELD, _YEARS = 100.0, 0.01, 0.02, 1.0


@dataclass(frozen=True, slots=True)
class SelfTest:
    """``covered``: every error bound covers the difference to the published price. ``worst``: the largest difference,
    relative. ``milliseconds``: one smile, the best of several."""

    covered: bool
    worst: float
    milliseconds: float
    prices: int


def run_self_test(*, repeats: int = 1) -> SelfTest:
    """Price the published smile ``repeats`` times and hold it against the table, in exact arithmetic."""
    strikes = np.array(list(_PUBLISHED))
    forward = _SPOT * math.exp((_RATE - _YIELD) * _YEARS)
    payoffs = np.full(strikes.shape, Payoff.CALL, dtype=np.uint8)
    smile = Slice(_YEARS, forward, math.exp(-_RATE * _YEARS), strikes, payoffs)
    model = MODELS["heston"](**_PARAMETERS)
    times = []
    for _ in range(repeats):
        begin = perf_counter()
        (found,) = price_smiles(model, [smile])
        times.append(perf_counter() - begin)
    published = [Fraction(text) for text in _PUBLISHED.values()]
    errors = [abs(Fraction(p) - q) for p, q in zip(found.prices.tolist(), published, strict=True)]
    covered = all(e <= Fraction(b) for e, b in zip(errors, found.error_bounds.tolist(), strict=True))
    worst = max(float(e / q) for e, q in zip(errors, published, strict=True))
    return SelfTest(covered, worst, 1e3 * min(times), len(published))
