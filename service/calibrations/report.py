"""The report of a calibration: one page that needs nothing but itself."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from html import escape
from importlib import resources
from string import Template
from typing import Any, Final
from urllib.parse import quote

from engine import MODELS
from service.calibrations.curves import curves_of
from service.calibrations.plots import expiry_plot, term_plot, years
from service.calibrations.tables import (
    correlation_table,
    figures,
    left_out_table,
    parameter_table,
    settings_table,
    warning_list,
)

__all__ = ["overview_page", "surface_page"]

_KEY: Final = (
    ("bid to ask", '<path class="bar" d="M6 1h6M9 1v10M6 11h6"/>'),
    ("mid", '<circle class="mid" cx="9" cy="6" r="3"/>'),
    ("mid, not used", '<circle class="mid unused" cx="9" cy="6" r="3"/>'),
    ("fitted model", '<path class="model" d="M1 9L21 3"/>'),
)


def surface_page(surface: Mapping[str, Any], asked: Mapping[str, Any], *, job: str, when: str) -> str:
    """The report of one surface. ``asked``: the request's settings; ``when`` the job ended, in words."""
    about = f"Fitted {when}. Job {job}. Volatilities per square root of a year, times in years."
    if surface["model"] is None:
        body = warning_list(surface["warnings"]) + _section("Left out", left_out_table(surface["left_out"]))
        return _page(f"{surface['id']}: no fit ({surface['status']})", about, body)
    title = MODELS[surface["model"]["name"]].title
    key = "".join(f'<li><svg aria-hidden="true" viewBox="0 0 22 12">{mark}</svg>{text}</li>' for text, mark in _KEY)
    plots = _plots(surface)
    body = "\n".join(
        [
            warning_list(surface["warnings"]),
            figures(surface),
            f'<h2>Market and model</h2><ul class="key">{key}</ul><div class="plots">{plots}</div>',
            _section("Parameters", parameter_table(surface, asked["fixed"])),
            _section("Correlation of the estimates", correlation_table(surface)),
            _section("Left out of the fit", left_out_table(surface["left_out"])),
            _section("How it was fitted", settings_table(asked)),
        ]
    )
    return _page(f"{surface['id']}: {title}", about, body)


def overview_page(surfaces: Sequence[Mapping[str, Any]], *, job: str, when: str) -> str:
    """All surfaces of a job in a table, each with a link to its own report."""
    rows = []
    for one in surfaces:
        rmse, inside = one["rmse_vol"], one["within_spread"]
        cells = (
            one["status"].replace("_", " "),
            "-" if rmse is None else f"{100 * rmse:.3g}",
            "-" if inside is None else f"{inside:.0%}",
            str(len(one["warnings"])),
            str(len(one["left_out"])),
        )
        row = "".join(f"<td>{cell}</td>" for cell in cells)
        link = f'<a href="?surface={quote(one["id"], safe="")}">{escape(one["id"])}</a>'
        rows.append(f'<tr><th scope="row">{link}</th>{row}</tr>')
    heads = ("surface", "status", "rmse, vol points", "inside bid and ask", "warnings", "left out")
    head = "".join(f'<th scope="col">{text}</th>' for text in heads)
    body = f'<div class="wide"><table><thead><tr>{head}</tr></thead><tbody>{"".join(rows)}</tbody></table></div>'
    return _page(f"{len(surfaces)} calibrated surfaces", f"Fitted {when}. Job {job}.", body)


def _plots(surface: Mapping[str, Any]) -> str:
    curves = curves_of(surface)
    order = sorted(range(len(surface["slices"])), key=lambda i: float(surface["slices"][i]["expiry"]))
    out, rows = [], []
    for number, i in enumerate(order):
        one = surface["slices"][i]
        plot = expiry_plot(one, number, {"strikes": curves.strikes[i], "vols": _sound(curves.vols[i])})
        caption = f"{years(one['expiry'])} <span>forward {one['forward']:.6g}</span>"
        out.append(f"<figure><figcaption>{caption}</figcaption>{plot}</figure>")
        model = curves.at_forward[i]
        market = _at_forward(one)
        rows.append({"expiry": one["expiry"], "market": market, "model": model if math.isfinite(model) else None})
    term = f"<figure><figcaption>At the money <span>by expiry</span></figcaption>{term_plot(rows)}</figure>"
    return "".join([term, *out])


def _sound(vols: Sequence[float]) -> list[float]:
    """Volatilities for an axis: what does not exist takes its neighbour's place."""
    sound = [v for v in vols if math.isfinite(v)]
    return [v if math.isfinite(v) else sound[0] for v in vols] if sound else []


def _at_forward(one: Mapping[str, Any]) -> float | None:
    """The market's volatility at the forward, on the straight line in log-moneyness between the quotes around it."""
    pairs = sorted(
        (math.log(strike / one["forward"]), vol)
        for strike, vol in zip(one["strikes"], one["market_vols"], strict=True)
        if vol is not None
    )
    for (low, a), (high, b) in zip(pairs, pairs[1:], strict=False):
        if low <= 0.0 <= high:
            return float(a) if high == low else float(a + (b - a) * (0.0 - low) / (high - low))
    return None


def _section(title: str, body: str) -> str:
    return f"<section><h2>{title}</h2>{body}</section>"


def _page(title: str, about: str, body: str) -> str:
    here = resources.files("service.calibrations")
    style = here.joinpath("report.css").read_text(encoding="utf-8")
    page = Template(here.joinpath("report.html").read_text(encoding="utf-8"))
    return page.substitute(title=escape(title), style=style, about=escape(about), body=body)
