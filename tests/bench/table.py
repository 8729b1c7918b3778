"""Compact tables for a terminal: the first column to the left, numbers to the right, a note under it."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

__all__ = ["Table", "count", "error", "ratio", "seconds"]


@dataclass(slots=True)
class Table:
    """Rows of ready-made cells under ``columns``; ``notes`` say what was measured against what."""

    title: str
    columns: tuple[str, ...]
    rows: list[tuple[str, ...]] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def add(self, *cells: str) -> None:
        """Append one row; it must have a cell for every column."""
        if len(cells) != len(self.columns):
            raise ValueError(f"{len(cells)} cells for {len(self.columns)} columns")
        self.rows.append(cells)

    def text(self) -> str:
        """The table as lines of text, also valid as a Markdown table under its title."""
        widths = [max(2, *(len(row[i]) for row in [self.columns, *self.rows])) for i in range(len(self.columns))]
        rule = tuple("-" * w if i == 0 else "-" * (w - 1) + ":" for i, w in enumerate(widths))
        lines = [self.title, ""]
        for row in [self.columns, rule, *self.rows]:
            cells = [c.ljust(w) if i == 0 else c.rjust(w) for i, (c, w) in enumerate(zip(row, widths, strict=True))]
            lines.append("| " + " | ".join(cells) + " |")
        return "\n".join([*lines, *(f"  {note}" for note in self.notes)]) + "\n"


def seconds(value: float) -> str:
    """A time with three significant digits and its unit."""
    for unit, scale in (("s", 1.0), ("ms", 1e3), ("us", 1e6)):
        if value * scale >= 1.0:
            return f"{value * scale:.3g} {unit}"
    return f"{value * 1e9:.3g} ns"


def ratio(value: float, reference: float) -> str:
    """``value / reference``, as a multiple."""
    return f"{value / reference:.3g} x" if reference > 0.0 else "-"


def error(value: float) -> str:
    """An error to two digits; exact zero and what is not there look different."""
    if math.isnan(value):
        return "-"
    return "0" if value == 0.0 else f"{value:.1e}"


def count(value: int) -> str:
    """A whole number with thousands set apart."""
    return f"{value:,}"
