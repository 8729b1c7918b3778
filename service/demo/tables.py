"""Compact tables for a terminal."""

from __future__ import annotations

from collections.abc import Sequence

__all__ = ["number", "table"]


def number(value: float | None, form: str) -> str:
    """A number by a format, a dash where there is none."""
    return "-" if value is None else format(value, form)


def table(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Columns to the right under their heads, the first to the left."""
    widths = [max(len(line[i]) for line in (heads, *rows)) for i in range(len(heads))]

    def line(cells: Sequence[str]) -> str:
        first, *rest = cells
        return "  ".join([first.ljust(widths[0]), *(c.rjust(w) for c, w in zip(rest, widths[1:], strict=True))])

    rule = "  ".join("-" * width for width in widths)
    return "\n".join([line(heads), rule, *(line(row) for row in rows)])
