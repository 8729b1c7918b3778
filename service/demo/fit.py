"""The step of the demo that fits a model: a job of many surfaces, followed as it goes, and its report saved."""

from __future__ import annotations

import json
import sys
import tempfile
import textwrap
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

import httpx

from service.demo.tables import number, table

__all__ = ["Fit", "FitError", "fit_chain"]

_MODEL: Final = "heston"
_WHOLE: Final = "whole chain"
_WIDTH: Final = 40
_LINE: Final = 118


class FitError(Exception):
    """The job did not succeed; one sentence."""


class Fit:
    """What came of it: the fitted ``model`` as later requests take it, and the ``text`` to print."""

    def __init__(self, model: dict[str, Any], text: str) -> None:
        self.model = model
        self.text = text


def fit_chain(client: httpx.Client, chain: dict[str, Any], title: str) -> Fit:
    """Fit the chain, and the chain without each of its expiries in turn: how far parameters move then says more than
    their standard errors. Progress is drawn as it comes."""
    surfaces = [{"id": _WHOLE, "chain": chain}]
    for i, expiry in enumerate(chain["expiries"]):
        rest = [one for j, one in enumerate(chain["expiries"]) if j != i]
        surfaces.append({"id": f"without {expiry['expiry']}", "chain": {**chain, "expiries": rest}})
    job = _submit(client, {"model": _MODEL, "weights": "spread", "loss": "soft_l1", "surfaces": surfaces})
    end = _follow(client, job)
    if end["status"] != "succeeded":
        raise FitError(f"the calibration job ended as {end['status']}")
    result = client.get(job["links"]["self"]).json()["result"]["surfaces"]
    page = client.get(job["links"]["report"], params={"surface": _WHOLE})
    saved = Path(tempfile.mkdtemp(prefix="smilewright-")) / "report.html"
    saved.write_text(page.text, encoding="utf-8")
    return Fit(result[0]["model"], _told(result, saved, title))


def _submit(client: httpx.Client, body: dict[str, Any]) -> dict[str, Any]:
    """The accepted job."""
    answer = client.post("/v1/calibrations", json=body, headers={"Idempotency-Key": "demo"})
    if answer.status_code not in (200, 202):
        raise FitError(f"the job was answered {answer.status_code}: {answer.json().get('detail', '')}")
    return dict(answer.json())


def _follow(client: httpx.Client, job: dict[str, Any]) -> dict[str, Any]:
    """Draw the progress of a job until it ends; the job as it is then."""
    live = sys.stdout.isatty()
    with client.stream("GET", job["links"]["events"]) as stream:
        for kind, data in _events(stream.iter_lines()):
            if kind == "end":
                print(flush=True)
                return data
            filled = _WIDTH * data["done"] // data["total"]
            bar = f"  [{'#' * filled}{'.' * (_WIDTH - filled)}] {data['done']}/{data['total']} surfaces"
            print(f"\r{bar}" if live else bar, end="" if live else "\n", flush=True)
    raise FitError("the events of the job broke off")


def _events(lines: Iterator[str]) -> Iterator[tuple[str, dict[str, Any]]]:
    """Kind and data of server-sent events."""
    kind = ""
    for line in lines:
        name, _, value = line.partition(": ")
        if name == "event":
            kind = value
        elif name == "data":
            yield kind, json.loads(value)


def _told(result: list[dict[str, Any]], saved: Path, title: str) -> str:
    names = list(result[0]["parameters"])
    rows = [
        [
            one["id"],
            *(number(one["parameters"][name], ".4f") for name in names),
            number(100.0 * one["rmse_vol"], ".3f"),
            number(one["within_spread"], ".0%"),
            one["status"].replace("_", " "),
        ]
        for one in result
    ]
    errors = ["standard errors", *(number(result[0]["standard_errors"][name], ".4f") for name in names), "", "", ""]
    heads = ["surface", *names, "rmse, vol points", "inside bid-ask", "status"]
    warnings = "".join(
        "\n" + textwrap.fill(text, _LINE, initial_indent="  - ", subsequent_indent="    ")
        for text in result[0]["warnings"]
    )
    return (
        f"Heston fitted to {title} and to the chain without each expiry in turn:\n\n"
        f"{table(heads, [rows[0], errors, *rows[1:]])}\n\n"
        f"{len(result[0]['left_out'])} quotes of the whole chain were left out. Warnings:{warnings or ' none'}\n"
        f"The report was saved: {saved}"
    )
