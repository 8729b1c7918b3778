"""Implied total deviation: the inverse of ``otm_value`` in ``s`` at fixed ``k``, one status a quote."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from engine.arrays import Bytes, Floats
from engine.black.formula import log_otm_value
from engine.status import Status

__all__ = ["TotalDeviations", "total_deviation"]


@dataclass(frozen=True, slots=True)
class TotalDeviations:
    """``deviations`` float64 (n,), NaN where ``statuses`` uint8 (n,) (codes of ``Status``) says why."""

    deviations: Floats
    statuses: Bytes


def total_deviation(k: ArrayLike, value: ArrayLike) -> TotalDeviations:
    """Total deviation ``s = vol sqrt(expiry)`` of an undiscounted out-of-the-money value per unit forward."""
    k, value = np.broadcast_arrays(np.asarray(k, dtype=np.float64), np.asarray(value, dtype=np.float64))
    top = np.exp(np.minimum(k, 0.0))
    statuses = np.full(k.shape, Status.OK, dtype=np.uint8)
    statuses[value >= top] = Status.ABOVE_MAXIMUM
    statuses[value == 0.0] = Status.ZERO_TIME_VALUE
    statuses[value < 0.0] = Status.BELOW_INTRINSIC
    statuses[~(np.isfinite(k) & np.isfinite(value))] = Status.NOT_FINITE
    deviations = np.full(k.shape, np.nan)
    at = np.flatnonzero(statuses == Status.OK)
    if at.size:
        deviations[at] = _bisect(k[at], np.log(value[at]))
    return TotalDeviations(deviations, statuses)


def _bisect(k: Floats, target: Floats) -> Floats:
    low, high = np.full(k.shape, np.log(1e-300)), np.full(k.shape, np.log(1e4))
    for _ in range(64):
        middle = 0.5 * (low + high)
        under = log_otm_value(k, np.exp(middle)) < target
        low, high = np.where(under, middle, low), np.where(under, high, middle)
    return np.exp(0.5 * (low + high))
