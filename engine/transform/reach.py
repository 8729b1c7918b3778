"""How far out the strikes of each slice reach: all that a plan needs to know of them.

Ends are rounded outward to eighths of the slice's own scale, so that a plan stays the same while the forward ticks.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats, Ints

__all__ = ["Reach", "Strikes", "reach_of"]

_SMALLEST = 5e-324
_CELLS = 8.0  # cells per standard deviation, rounded down to a power of two in ``k``


@dataclass(frozen=True, slots=True)
class Strikes:
    """Ragged strikes of a batch: ``k = ln(K/F)`` of shape (n,), ``slice_of`` (n,) non-decreasing, ``starts`` (S,)."""

    k: Floats
    slice_of: Ints
    starts: Ints

    @property
    def side_of(self) -> Ints:
        """Call sides are 0..S-1, put sides S..2S-1."""
        return np.where(self.k >= 0.0, self.slice_of, self.slice_of + self.starts.shape[0])


@dataclass(frozen=True, slots=True)
class Reach:
    """``near <= |k| <= far`` of the strikes on each side, (2 S,): calls first, then puts; ``far < 0`` where there is
    none. With strikes on both sides ``near`` is 0."""

    near: Floats
    far: Floats

    def take(self, members: Ints) -> Reach:
        """The reach of some slices."""
        both = np.concatenate([members, members + self.near.shape[0] // 2])
        return Reach(self.near[both], self.far[both])

    def interval(self) -> tuple[Floats, Floats]:
        """The interval of ``k`` of each slice, (S,) each."""
        count = self.near.shape[0] // 2
        call, put = self.far[:count] >= 0.0, self.far[count:] >= 0.0
        low = np.where(put, -self.far[count:], self.near[:count])
        high = np.where(call, self.far[:count], -self.near[count:])
        return low, high


def reach_of(strikes: Strikes, scale: Floats, *, rounded: bool = True) -> Reach:
    """The reach of every side, rounded outward or exact. ``scale`` (S,): standard deviation of ``X``, > 0."""
    low = np.minimum.reduceat(strikes.k, strikes.starts)
    high = np.maximum.reduceat(strikes.k, strikes.starts)
    far_all = np.concatenate([high, -low])
    near_all = np.maximum(np.concatenate([low, -high]), 0.0)
    used = far_all >= np.concatenate([np.zeros(low.shape), np.full(low.shape, _SMALLEST)])  # k = 0 is a call's
    if rounded:
        cell = np.tile(np.exp2(np.floor(np.log2(scale / _CELLS))), 2)
        far_all, near_all = np.ceil(far_all / cell) * cell, np.floor(near_all / cell) * cell
    return Reach(np.where(used, near_all, 0.0), np.where(used, far_all, -1.0))
