"""Log-moneyness, the engine's coordinate of a strike."""

from __future__ import annotations

import numpy as np

from engine.arrays import Floats

__all__ = ["log_moneyness"]


def log_moneyness(strikes: Floats, forward: Floats | float) -> Floats:
    """``k = ln(K / F)`` to a few units of *relative* rounding, near the money too: ``log1p((K - F) / F)`` there, where
    ``K - F`` is exact (Sterbenz)."""
    gap = (strikes - forward) / forward
    near = np.abs(gap) < 0.5
    return np.where(near, np.log1p(np.where(near, gap, 0.0)), np.log(strikes / forward))
