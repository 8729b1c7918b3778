"""The tables and lists of a report, as HTML."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from html import escape
from typing import Any, Final

from engine import MODELS

__all__ = ["correlation_table", "figures", "left_out_table", "parameter_table", "settings_table", "warning_list"]

_SHOWN: Final = 200  # quotes left out that are listed one by one


def figures(surface: Mapping[str, Any]) -> str:
    """The numbers that say how good a fit is."""
    used = sum(sum(one["used"]) for one in surface["slices"])
    cells = (
        ("status", surface["status"].replace("_", " ")),
        ("root mean square error", _points(surface["rmse_vol"])),
        ("largest error", _points(surface["max_abs_error_vol"])),
        ("inside bid and ask", _form(surface["within_spread"], ".0%")),
        ("quotes used", str(used)),
        ("Feller ratio", _form(surface["feller_ratio"], ".3g")),
        ("condition number", _form(surface["condition_number"], ".3g")),
        ("surface evaluations", _form(surface["evaluations"], "d")),
    )
    inner = "".join(f"<div><dt>{name}</dt><dd>{value}</dd></div>" for name, value in cells)
    return f'<dl class="figures">{inner}</dl>'


def warning_list(warnings: Sequence[str]) -> str:
    """Warnings in words, or nothing."""
    if not warnings:
        return ""
    items = "".join(f"<li>{escape(text)}</li>" for text in warnings)
    return f'<section class="warnings" aria-label="Warnings"><ul>{items}</ul></section>'


def parameter_table(surface: Mapping[str, Any], fixed: Iterable[str]) -> str:
    """Parameters with standard errors and what they mean."""
    specs = {spec.name: spec for spec in MODELS[surface["model"]["name"]].parameters}
    held = set(fixed)
    rows = []
    for name, value in surface["parameters"].items():
        error = surface["standard_errors"].get(name)
        note = "fixed" if name in held else "on a bound" if name in surface["at_bound"] else ""
        spec = specs[name]
        cells = (f"{value:.6g}", _form(error, ".2g"), note)
        row = "".join(f"<td>{cell}</td>" for cell in cells)
        text = f'<td class="text">{escape(spec.description)}</td><td class="text">{escape(spec.unit)}</td>'
        rows.append(f'<tr><th scope="row">{escape(name)}</th>{row}{text}</tr>')
    heads = ("parameter", "value", "standard error", "", '"what it is', '"unit')
    return _table(heads, rows)


def correlation_table(surface: Mapping[str, Any]) -> str:
    """Correlations of the estimates, the stronger the darker."""
    names = surface["correlation_order"]
    if not names:
        return "<p>No parameter has a standard error, so there is no correlation.</p>"
    rows = []
    for name, row in zip(names, surface["correlation"], strict=True):
        cells = "".join(f'<td style="--w:{abs(c or 0.0):.2f}">{_form(c, ".2f")}</td>' for c in row)
        rows.append(f'<tr><th scope="row">{escape(name)}</th>{cells}</tr>')
    return _table(("", *map(escape, names)), rows, kind="matrix")


def left_out_table(left_out: Sequence[Mapping[str, Any]]) -> str:
    """What the clean-up left out, and why."""
    if not left_out:
        return "<p>Nothing was left out.</p>"
    rows = [
        f"<tr><td>{one['expiry']:.4g}</td><td>{_form(one['strike'], 'g') if one['strike'] else 'all'}</td>"
        f'<td class="text">{escape(", ".join(one["flags"]).replace("_", " "))}</td></tr>'
        for one in left_out[:_SHOWN]
    ]
    more = f"<p>And {len(left_out) - _SHOWN} more.</p>" if len(left_out) > _SHOWN else ""
    return _table(("years", "strike", '"why'), rows) + more


def settings_table(asked: Mapping[str, Any]) -> str:
    """How the fit was asked for, choices left open included."""
    rows = []
    for name in ("residuals", "weights", "loss", "feller", "starts", "seed", "bounds", "fixed", "start", "prior"):
        value = asked[name]
        if value or value == 0:
            told = _pairs(value) if isinstance(value, Mapping) else str(value)
            rows.append(f'<tr><th scope="row">{name}</th><td class="text">{escape(told)}</td></tr>')
    return _table(("choice", '"value'), rows)


def _pairs(value: Mapping[str, Any]) -> str:
    def told(one: Any) -> str:
        if isinstance(one, Mapping):
            return f"({_pairs(one)})"
        return " to ".join(f"{v:g}" for v in one) if isinstance(one, list | tuple) else f"{one:g}"

    return ", ".join(f"{name} {told(one)}" for name, one in value.items())


def _table(heads: Sequence[str], rows: Sequence[str], *, kind: str = "") -> str:
    """A table that scrolls by itself on a narrow page; a head after a quotation mark is of a column of text."""
    cells = "".join(
        f'<th scope="col" class="text">{head[1:]}</th>' if head.startswith('"') else f'<th scope="col">{head}</th>'
        for head in heads
    )
    body = "".join(rows)
    return f'<div class="wide"><table class="{kind}"><thead><tr>{cells}</tr></thead><tbody>{body}</tbody></table></div>'


def _form(value: float | None, form: str) -> str:
    return "-" if value is None or not math.isfinite(value) else format(value, form)


def _points(value: float | None) -> str:
    """A difference in volatility as vol points."""
    return "-" if value is None or not math.isfinite(value) else f"{100 * value:.3g} vol points"
