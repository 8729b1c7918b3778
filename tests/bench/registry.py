"""Which benchmarks there are: every module of ``tests.bench.cases``."""

from __future__ import annotations

import importlib
import pkgutil
from collections.abc import Callable, Iterable
from dataclasses import dataclass

from tests.bench import cases
from tests.bench.table import Table
from tests.bench.timing import Stopwatch

__all__ = ["Benchmark", "load", "names"]


@dataclass(frozen=True, slots=True)
class Benchmark:
    """One benchmark: its name (the file's), a line about it, and what makes its tables."""

    name: str
    title: str
    tables: Callable[[Stopwatch], Iterable[Table]]


def names() -> list[str]:
    """The names of all benchmarks, sorted; nothing is imported."""
    return sorted(module.name for module in pkgutil.iter_modules(cases.__path__))


def load(name: str) -> Benchmark:
    """Import one benchmark. Raises KeyError for a name that is not there."""
    if name not in names():
        raise KeyError(name)
    module = importlib.import_module(f"{cases.__name__}.{name}")
    return Benchmark(name, module.TITLE, module.tables)
