"""Axes and marks of plots in SVG, as text: what a plotting library would do, for the few kinds of mark that are needed.

Written by hand because a page must follow the reader's dark mode and print in ink, which needs colours by class rather
than fixed ones; because each plot needs a name for those who do not see it; and because a report then costs
milliseconds and kilobytes.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

__all__ = ["Axis", "Frame", "figure", "line", "ticks", "words"]


@dataclass(frozen=True, slots=True)
class Axis:
    """Values from ``low`` to ``high`` on pixels from ``start`` to ``end`` (which may run downward)."""

    low: float
    high: float
    start: float
    end: float

    def at(self, value: float) -> float:
        """Pixel of a value."""
        return self.start + (value - self.low) / (self.high - self.low) * (self.end - self.start)

    @classmethod
    def over(cls, values: Sequence[float], start: float, end: float, *, margin: float = 0.06) -> Axis:
        """An axis over all values and a little more."""
        low, high = min(values), max(values)
        room = margin * (high - low) or 0.05 * abs(high) or 1.0
        return cls(low - room, high + room, start, end)


@dataclass(frozen=True, slots=True)
class Frame:
    """A panel: an axis across and one upward."""

    x: Axis
    y: Axis

    def border(self) -> str:
        """The panel's outline."""
        left, top = self.x.start, self.y.end
        size = f'width="{self.x.end - left:g}" height="{self.y.start - top:g}"'
        return f'<rect class="panel" x="{left:g}" y="{top:g}" {size}/>'

    def down(self, form: str, *, count: int = 5, scale: float = 1.0) -> str:
        """Ticks, grid and numbers of the upward axis."""
        out = []
        for value in ticks(self.y.low * scale, self.y.high * scale, count):
            y = self.y.at(value / scale)
            out.append(line(self.x.start, y, self.x.end, y, "grid"))
            out.append(words(self.x.start - 5, y + 4, format(value, form), "end"))
        return "".join(out)

    def across(self, form: str, *, y: float, count: int = 5, grid: bool = True) -> str:
        """Ticks, grid and numbers of the axis across, the numbers at height ``y``."""
        out = []
        for value in ticks(self.x.low, self.x.high, count):
            x = self.x.at(value)
            if grid:
                out.append(line(x, self.y.start, x, self.y.end, "grid"))
            out.append(words(x, y, format(value, form), "middle"))
        return "".join(out)

    def curve(self, xs: Sequence[float], ys: Sequence[float | None], kind: str) -> str:
        """A line through points, broken where there is none."""
        runs: list[list[str]] = [[]]
        for x, y in zip(xs, ys, strict=True):
            if y is None or not math.isfinite(y):
                runs.append([])
            else:
                runs[-1].append(f"{self.x.at(x):.1f},{self.y.at(y):.1f}")
        return "".join(f'<polyline class="{kind}" points="{" ".join(run)}"/>' for run in runs if len(run) > 1)

    def dot(self, x: float, y: float, kind: str, *, radius: float = 2.6) -> str:
        """A point."""
        return f'<circle class="{kind}" cx="{self.x.at(x):.1f}" cy="{self.y.at(y):.1f}" r="{radius:g}"/>'

    def bar(self, x: float, low: float, high: float, kind: str, *, cap: float = 2.5) -> str:
        """An upright bar with caps."""
        at, bottom, top = self.x.at(x), self.y.at(low), self.y.at(high)
        foot, head = (f"M{at - cap:.1f} {end:.1f}h{2 * cap:g}" for end in (bottom, top))
        return f'<path class="{kind}" d="{foot}M{at:.1f} {bottom:.1f}V{top:.1f}{head}"/>'


def figure(name: str, title: str, text: str, width: int, height: int, body: str) -> str:
    """A plot with a title and a text for those who do not see it."""
    return (
        f'<svg role="img" aria-labelledby="{name}-t {name}-d" viewBox="0 0 {width} {height}" '
        f'preserveAspectRatio="xMidYMid meet"><title id="{name}-t">{escape(title)}</title>'
        f'<desc id="{name}-d">{escape(text)}</desc>{body}</svg>'
    )


def line(x1: float, y1: float, x2: float, y2: float, kind: str) -> str:
    """A straight line in pixels."""
    return f'<line class="{kind}" x1="{x1:.1f}" y1="{y1:.1f}" x2="{x2:.1f}" y2="{y2:.1f}"/>'


def words(x: float, y: float, text: str, anchor: str, kind: str = "tick") -> str:
    """A text in pixels."""
    return f'<text class="{kind}" x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}">{escape(text)}</text>'


def ticks(low: float, high: float, count: int) -> list[float]:
    """Round values between two ends, about ``count`` of them: steps of 1, 2 or 5 times a power of ten."""
    if not high > low:
        return [low]
    rough = (high - low) / count
    power = 10.0 ** math.floor(math.log10(rough))
    step = min((unit * power for unit in (1.0, 2.0, 5.0, 10.0)), key=lambda one: abs(math.log(one / rough)))
    first = math.ceil(low / step - 1e-9)
    last = math.floor(high / step + 1e-9)
    return [0.0 if i == 0 else i * step for i in range(first, last + 1)]
