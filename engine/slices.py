"""Slices checked and laid side by side: ragged columns that every room works on at once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from engine.arrays import Bytes, Floats, Ints
from engine.errors import InputError

__all__ = ["EXPIRY_RANGE", "Batch", "Slice", "side_by_side"]

EXPIRY_RANGE = (1.0 / (365.0 * 24.0), 50.0)  # years: one hour to fifty years, the range the engine is tested over


@dataclass(frozen=True, slots=True)
class Slice:
    """One expiry. ``expiry`` in years; ``forward`` and ``discount_factor`` > 0; ``strikes`` float64 (n,) > 0 in the
    unit of the forward; ``payoffs`` uint8 (n,) codes of ``Payoff``. ``spot``: if given, Greeks are with respect to
    it, and the forward's growth from it gives the carry that theta holds fixed."""

    expiry: float
    forward: float
    discount_factor: float
    strikes: Floats
    payoffs: Bytes
    spot: float | None = None


@dataclass(frozen=True, slots=True)
class Batch:
    """All slices side by side: ragged columns (n,) and per-slice columns (S,)."""

    strikes: Floats
    payoffs: Bytes
    slice_of: Ints
    starts: Ints
    lengths: Ints
    expiry: Floats
    forward: Floats
    discount: Floats

    def points(self, members: Ints) -> Ints:
        """Positions of the strikes of the given slices, in order."""
        if members.shape[0] == self.starts.shape[0]:
            return np.arange(self.strikes.shape[0])
        return np.concatenate([np.arange(self.starts[i], self.starts[i] + self.lengths[i]) for i in members])


def side_by_side(slices: Sequence[Slice]) -> Batch:
    """Check every slice and lay the columns end to end."""
    for i, s in enumerate(slices):
        for name, value, low, high in (
            ("expiry", s.expiry, *EXPIRY_RANGE),
            ("forward", s.forward, 1e-12, 1e15),
            ("discount_factor", s.discount_factor, 1e-12, 1e3),
        ):
            if not low <= value <= high:
                raise InputError(f"slices.{name}", f"is {value!r}", index=(i,), allowed=f"{low:g} to {high:g}")
        if s.strikes.ndim != 1 or s.strikes.shape[0] == 0:
            raise InputError("slices.strikes", "is empty", index=(i,), allowed="at least one strike")
        if not (s.strikes.min() > 0.0 and s.strikes.max() < np.inf):
            at = int(np.flatnonzero(~((s.strikes > 0.0) & np.isfinite(s.strikes)))[0])
            raise InputError(
                "slices.strikes", f"is {float(s.strikes[at])!r}", index=(i, at), allowed="finite and above 0"
            )
        if s.payoffs.shape != s.strikes.shape:
            raise InputError("slices.payoffs", "has another length than strikes", index=(i,), allowed="one per strike")
    lengths = np.array([s.strikes.shape[0] for s in slices])
    return Batch(
        np.concatenate([s.strikes for s in slices]),
        np.concatenate([s.payoffs for s in slices]),
        np.arange(len(slices)).repeat(lengths),
        lengths.cumsum() - lengths,
        lengths,
        np.array([s.expiry for s in slices]),
        np.array([s.forward for s in slices]),
        np.array([s.discount_factor for s in slices]),
    )
