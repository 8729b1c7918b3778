"""What a row hands back for its strikes, and the scaling that keeps it inside the double range."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import EPS, Floats

__all__ = ["RowValues", "assemble"]

_SMALLEST = float(np.finfo(np.float64).tiny)


@dataclass(frozen=True, slots=True)
class RowValues:
    """``value``: the row's raw value per strike; ``bound``: a bound on its absolute error. Shape (n,)."""

    value: Floats
    bound: Floats


def assemble(
    *,
    total: Floats,
    log_scale: Floats,
    rounding: Floats,
    slope: Floats,
    pieces: Floats,
    k: Floats,
    shifted: Floats,
    aliases: Floats,
    alias_size: Floats,
) -> RowValues:
    """Put the strike factor back: ``value = exp(log_scale + shifted) total - aliases`` with its bound.

    ``total``: the sum in units of ``exp(log_scale)``; ``rounding``: its rounding error in the same units; ``slope``:
    the change of ``total`` per unit of ``k``, which the rounding of ``k`` itself excites; ``pieces``: the
    discretisation and truncation bound, in the same units; ``shifted = (shift - p) k`` is the log of the strike
    factor; ``aliases`` are subtracted, known to ``alias_size`` units.
    """
    scale = np.exp(log_scale + shifted)
    value = scale * total - aliases
    exponent_error = np.abs(log_scale) + np.abs(shifted) + 2.0
    units = rounding + EPS * (exponent_error * np.abs(total) + np.abs(k) * slope)
    bound = scale * (units + pieces) + EPS * (alias_size + np.abs(value)) + _SMALLEST
    return RowValues(value, bound)
