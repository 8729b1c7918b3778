"""The plots of a report: one a expiry, and the term structure at the money."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any, Final

from service.calibrations.axes import Axis, Frame, figure, line, ticks, words

__all__ = ["expiry_plot", "term_plot", "years"]

Slice = Mapping[str, Any]
_WIDTH, _HEIGHT = 460, 400
_LEFT, _RIGHT = 48, 448
_TOP, _MIDDLE = 40, 262
_LOWER_TOP, _LOWER_END = 290, 364
_DIGITS: Final = 6


def expiry_plot(one: Slice, number: int, curve: Mapping[str, Sequence[float]]) -> str:
    """One expiry: above, bid-ask bars, mids and the model's curve against strike (below) and log-moneyness (above);
    underneath, model less market in volatility points with the bid-ask room around zero. ``curve`` has ``strikes`` and
    ``vols`` of the fitted model."""
    rows = _rows(one)
    strikes = one["strikes"]
    x = Axis.over([*strikes, *curve["strikes"]], _LEFT, _RIGHT, margin=0.03)
    seen = [v for row in rows for v in (row["mid"], row["bid"], row["ask"]) if v is not None]
    upper = Frame(x, Axis.over([*seen, *curve["vols"]] or [0.0, 1.0], _MIDDLE, _TOP))
    parts = [
        upper.down(".1f", scale=100.0),
        upper.across("g", y=_MIDDLE + 15),
        _log_moneyness(x, one["forward"]),
        upper.border(),
        line(x.at(one["forward"]), _MIDDLE, x.at(one["forward"]), _TOP, "forward"),
        *(upper.bar(r["strike"], r["bid"], r["ask"], "bar") for r in rows if r["bid"] and r["ask"]),
        upper.curve(curve["strikes"], curve["vols"], "model"),
        *(upper.dot(r["strike"], r["mid"], "mid" if r["used"] else "mid unused") for r in rows if r["mid"]),
        words(_LEFT, 12, "volatility, %", "start", "label"),
        words(_RIGHT, 12, "log-moneyness", "end", "label"),
        _residuals(rows, x),
        words(_LEFT, _HEIGHT - 6, "strike; dashed: forward", "start", "label"),
        words(_RIGHT, _HEIGHT - 6, "model less market, vol points", "end", "label"),
    ]
    used = [row["residual"] for row in rows if row["used"] and row["residual"] is not None]
    worst = max(map(abs, used), default=0.0)
    title = f"Volatilities at {years(one['expiry'])}"
    text = (
        f"{len(strikes)} strikes from {min(strikes):g} to {max(strikes):g}, forward {one['forward']:.6g}. "
        f"{len(used)} quotes were used; the largest difference of model and market is {100 * worst:.3g} vol points."
    )
    return figure(f"expiry-{number}", title, text, _WIDTH, _HEIGHT, "".join(parts))


def years(expiry: float) -> str:
    """A time to expiry in words."""
    return f"{expiry:.4g} year{'' if expiry == 1.0 else 's'}"


def term_plot(rows: Sequence[Mapping[str, float | None]]) -> str:
    """Volatility at the forward against the time to expiry: ``expiry``, ``market`` (or None) and ``model``."""
    times = [row["expiry"] or 0.0 for row in rows]
    vols = [v for row in rows for v in (row["market"], row["model"]) if v is not None and math.isfinite(v)]
    frame = Frame(Axis.over([0.0, *times], _LEFT, _RIGHT, margin=0.03), Axis.over(vols or [0.0, 1.0], 200, 24))
    parts = [
        frame.down(".1f", scale=100.0),
        frame.across("g", y=215),
        frame.border(),
        frame.curve(times, [row["model"] for row in rows], "model"),
        *(frame.dot(t, row["model"], "on-model") for t, row in zip(times, rows, strict=True) if row["model"]),
        *(
            frame.dot(t, row["market"], "mid", radius=3.2)
            for t, row in zip(times, rows, strict=True)
            if row["market"] is not None
        ),
        words(_LEFT, 14, "volatility at the forward, %", "start", "label"),
        words(_RIGHT, 232, "years to expiry", "end", "label"),
    ]
    told = "; ".join(
        f"{row['expiry']:.3g} years: market {_percent(row['market'])}, model {_percent(row['model'])}" for row in rows
    )
    return figure("term", "Volatility at the money by expiry", told, _WIDTH, 240, "".join(parts))


def _rows(one: Slice) -> list[dict[str, Any]]:
    """The columns of a slice as rows, by strike."""
    count = len(one["strikes"])
    empty = [None] * count
    columns = zip(
        one["strikes"],
        one["market_vols"],
        one["bid_vols"] or empty,
        one["ask_vols"] or empty,
        one["residual_vols"],
        one["used"],
        strict=True,
    )
    names = ("strike", "mid", "bid", "ask", "residual", "used")
    return sorted((dict(zip(names, row, strict=True)) for row in columns), key=lambda row: float(row["strike"]))


def _residuals(rows: Sequence[Mapping[str, Any]], x: Axis) -> str:
    """Model less market around zero."""
    room = [r[side] - r["mid"] for r in rows if r["mid"] for side in ("bid", "ask") if r[side]]
    found = [r["residual"] for r in rows if r["residual"] is not None]
    most = max(map(abs, [*room, *found]), default=0.0) or 1e-4
    frame = Frame(x, Axis(-1.15 * most, 1.15 * most, _LOWER_END, _LOWER_TOP))
    zero = frame.y.at(0.0)
    parts = [
        frame.down(f".{_places(most)}f", count=3, scale=100.0),
        frame.border(),
        line(_LEFT, zero, _RIGHT, zero, "zero"),
    ]
    for row in rows:
        if row["mid"] and row["bid"] and row["ask"]:
            parts.append(frame.bar(row["strike"], row["bid"] - row["mid"], row["ask"] - row["mid"], "bar"))
        if row["residual"] is not None:
            at = x.at(row["strike"])
            parts.append(line(at, zero, at, frame.y.at(row["residual"]), "stem"))
            parts.append(frame.dot(row["strike"], row["residual"], "on-model" if row["used"] else "mid unused"))
    return "".join(parts)


def _log_moneyness(x: Axis, forward: float) -> str:
    """Numbers of log-moneyness along the top of a plot whose axis is in strikes."""
    low, high = math.log(max(x.low, 1e-3 * x.high) / forward), math.log(x.high / forward)
    marks = []
    for k in ticks(low, high, 6):
        at = x.at(forward * math.exp(k))
        if x.start <= at <= x.end:
            marks += [line(at, _TOP, at, _TOP - 4, "grid"), words(at, _TOP - 8, f"{k:.3g}", "middle")]
    return "".join(marks)


def _places(most: float) -> int:
    """Decimals that tell residuals of this size apart, in vol points."""
    return min(max(0, 1 - math.floor(math.log10(100.0 * most))), _DIGITS)


def _percent(value: float | None) -> str:
    return "none" if value is None or not math.isfinite(value) else f"{100 * value:.2f} %"
