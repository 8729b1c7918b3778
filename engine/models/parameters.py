"""Checking and stacking of model parameters: the same for every model."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from engine.arrays import Ints
from engine.errors import InputError
from engine.protocols import ParameterSpec

__all__ = ["check_parameters", "stack_columns", "take_rows"]


def check_parameters(model: Any, specs: Sequence[ParameterSpec], *, prefix: str = "model") -> None:
    """Raise InputError for the first parameter of ``model`` (floats) outside its admissible range."""
    for spec in specs:
        value = getattr(model, spec.name)
        if isinstance(value, bool) or not isinstance(value, (int, float, np.floating)):
            raise InputError(f"{prefix}.{spec.name}", "is not a number", allowed=spec.allowed)
        if not spec.admits(float(value)):
            raise InputError(f"{prefix}.{spec.name}", f"is {float(value)!r}", allowed=spec.allowed)


def stack_columns(models: Sequence[Any], names: Sequence[str]) -> dict[str, Any]:
    """``{name: float64 column of shape (rows, 1)}`` for the given attributes of the models."""
    table = np.array([[getattr(m, name) for name in names] for m in models], dtype=np.float64)
    return {name: np.ascontiguousarray(table[:, i : i + 1]) for i, name in enumerate(names)}


def take_rows(model: Any, names: Sequence[str], index: Ints) -> dict[str, Any]:
    """``{name: column[index]}`` of a stacked model."""
    return {name: getattr(model, name)[index] for name in names}
