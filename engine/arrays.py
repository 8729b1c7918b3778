"""Array types and the one place where inputs are coerced to float64 vectors."""

from __future__ import annotations

from typing import Any, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from engine.errors import InputError

__all__ = ["EPS", "Bytes", "Complexes", "Floats", "Ints", "vector"]

Floats: TypeAlias = NDArray[np.float64]
Complexes: TypeAlias = NDArray[np.complex128]
Ints: TypeAlias = NDArray[np.int64]
Bytes: TypeAlias = NDArray[np.uint8]

EPS = float(np.finfo(np.float64).eps)  # the gap between 1 and the next double


def vector(name: str, values: ArrayLike, *, length: int | None = None) -> Floats:
    """Coerce to a contiguous float64 vector of shape (n,); ``length`` broadcasts a scalar and checks the size.

    Raises InputError naming the argument when the values are not numbers, not one-dimensional or of another length.
    NaN and infinity pass: they are faults of one element, not of the call.
    """
    try:
        out: Any = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError):
        raise InputError(name, "is not an array of numbers") from None
    if out.ndim == 0 and length is not None:
        out = np.full(length, float(out))
    if out.ndim != 1:
        raise InputError(name, f"has {out.ndim} dimensions", allowed="one-dimensional array")
    if length is not None and out.shape[0] != length:
        raise InputError(name, f"has {out.shape[0]} values", allowed=f"exactly {length}")
    return np.ascontiguousarray(out)
