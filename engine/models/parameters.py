"""Checking and stacking of model parameters: the same for every model whose fields are numbers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import fields
from typing import Any, ClassVar, Self

import numpy as np

from engine.arrays import Floats, Ints
from engine.errors import InputError
from engine.protocols import ParameterSpec

__all__ = ["Columns", "check_parameters"]


def check_parameters(model: Any, specs: Sequence[ParameterSpec], *, prefix: str = "model") -> None:
    """Raise InputError for the first parameter of ``model`` (floats) outside its admissible range."""
    for spec in specs:
        value = getattr(model, spec.name)
        if isinstance(value, bool) or not isinstance(value, (int, float, np.floating)):
            raise InputError(f"{prefix}.{spec.name}", "is not a number", allowed=spec.allowed)
        if not spec.admits(float(value)):
            raise InputError(f"{prefix}.{spec.name}", f"is {float(value)!r}", allowed=spec.allowed)


class Columns:
    """A frozen dataclass of numbers that can be stacked into columns; the base of most models."""

    __slots__ = ()
    parameters: ClassVar[tuple[ParameterSpec, ...]]
    gradient_growth: ClassVar[int] = 2

    @classmethod
    def _names(cls) -> list[str]:
        return [f.name for f in fields(cls)]  # type: ignore[arg-type]

    @classmethod
    def stack(cls, models: Sequence[Self]) -> Self:
        """One object with columns of shape (rows, 1) out of ``rows`` objects with floats."""
        names = cls._names()
        table = np.array([[getattr(m, name) for name in names] for m in models], dtype=np.float64)
        return cls(*(np.ascontiguousarray(table[:, i : i + 1]) for i in range(len(names))))

    def take(self, index: Ints) -> Self:
        """Of a stacked object, the rows at ``index``: columns of shape (m, 1)."""
        return type(self)(*(getattr(self, name)[index] for name in self._names()))

    def columns(self) -> Floats:
        """All parameters of a stacked object side by side, (rows, P)."""
        return np.concatenate([getattr(self, name) for name in self._names()], axis=1)

    def row(self, at: int) -> list[float]:
        """The parameters of row ``at`` as floats; of an object with floats, those."""
        return [float(np.ravel(getattr(self, name))[at]) for name in self._names()]

    def check(self) -> None:
        """Raise InputError naming the first parameter outside its range."""
        check_parameters(self, self.parameters)
