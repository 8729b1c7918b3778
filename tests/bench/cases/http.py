"""``/v1/smiles`` over HTTP against an empty endpoint with the same schemas: one worker, eight connections.

A server that is kept busy answers one request per CPU time of a request, whatever else the machine does; requests per
second by the wall clock, callers on the same machine, stand beside it.
"""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import Any, TypeAlias

import numpy as np
from fastapi import FastAPI, Request
from starlette.responses import Response

from engine import MODELS, Payoff, Slice, price_smiles
from service.app import create_app
from service.encoding import encode
from service.settings import Settings
from service.smiles.schemas import SmilesAnswer, SmilesAsked
from tests.bench.http_load import CONNECTIONS, Server, requested, sent, serving
from tests.bench.table import Table, count, seconds
from tests.bench.timing import Stopwatch

TITLE = "/v1/smiles over HTTP"
STRIKES, MANY = 50, 10_000
MODEL = {"name": "heston", "v0": 0.04, "kappa": 4.0, "theta": 0.25, "sigma": 1.0, "rho": -0.5}
PLAIN, RAW, SERVICE = "/plain", "/raw", "/v1/smiles"


EMPTY = "empty endpoint, schemas by the framework"
Rows: TypeAlias = dict[str, tuple[Server, Callable[[], list[bytes]]]]
FIXED = {"expiry": 1.0, "forward": 99.0, "discount_factor": 0.99}


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Fifty strikes with default outputs, and ten thousand."""
    few, new = (4, 16) if watch.quick else (40, 400)
    with serving(empty_app) as empty, serving(service_app) as service:
        again, many = _body(STRIKES), _body(MANY)
        counter = itertools.count()  # no model comes twice
        rows: Rows = {
            EMPTY: (empty, lambda: [requested(PLAIN, again)] * new),
            "empty endpoint, body read raw": (empty, lambda: [requested(RAW, again)] * new),
            "/v1/smiles, the same request": (service, lambda: [requested(SERVICE, again)] * new),
            "/v1/smiles, prices only": (service, lambda: [requested(SERVICE, {**again, "outputs": ["price"]})] * new),
            "/v1/smiles, a new model each time": (
                service,
                lambda: [requested(SERVICE, _body(STRIKES, v0=0.04 + 1e-7 * next(counter))) for _ in range(new)],
            ),
        }
        yield _table(f"{STRIKES} strikes, default outputs", rows, watch, size=new, alone=_engine(STRIKES))
        rows = {
            EMPTY: (empty, lambda: [requested(PLAIN, many)] * few),
            "empty endpoint, body read raw": (empty, lambda: [requested(RAW, many)] * few),
            "/v1/smiles": (service, lambda: [requested(SERVICE, many)] * few),
        }
        yield _table(f"{count(MANY)} strikes, default outputs", rows, watch, size=few, alone=_engine(MANY))


def _table(title: str, rows: Rows, watch: Stopwatch, *, size: int, alone: Callable[[], object]) -> Table:
    servers = {id(server): server for server, _ in rows.values()}.values()
    works = {name: _work(*row) for name, row in rows.items()}
    cpu = replace(watch, clock=lambda: sum(server.cpu() for server in servers)).together(works)
    wall = replace(watch, clock=time.perf_counter).together(works)
    table = Table(
        title,
        ("", "CPU per request", "requests/s of a core", "of the empty endpoint", "goal", "requests/s by the wall"),
        notes=[
            f"one worker, {CONNECTIONS} connections; CPU of the server's process",
            f"best of {cpu[EMPTY].rounds} rounds of {size} requests",
            "engine alone: price_smiles in this process, the same request again, one a call",
        ],
    )
    least = cpu[EMPTY].best / size
    for name in rows:
        spent = cpu[name].best / size
        goal = "0.35, aim 0.5" if name.endswith("the same request") else ""
        by_wall = f"{size / wall[name].best:,.0f}"
        table.add(name, seconds(spent), f"{1.0 / spent:,.0f}", f"{least / spent:.2f}", goal, by_wall)
    table.add("engine alone", seconds(watch.one(alone).best), "", "", "", "")
    return table


def _work(server: Server, requests: Callable[[], list[bytes]]) -> Callable[[], object]:
    return lambda: sent(server, requests())


def _engine(strikes: int) -> Callable[[], object]:
    """The engine's part of a request."""
    model = MODELS["heston"](**{name: value for name, value in MODEL.items() if name != "name"})
    column = np.array(_body(strikes)["slices"][0]["strikes"])
    one = Slice(**FIXED, strikes=column, payoffs=np.full(strikes, Payoff.OTM, dtype=np.uint8))
    return lambda: price_smiles(model, [one])


def _body(strikes: int, **model: float) -> dict[str, Any]:
    return {
        "model": {**MODEL, **model},
        "market": {"spot": 100.0, "rate": 0.01, "dividend_yield": 0.02},
        "slices": [{"expiry": 1.0, "strikes": [50.0 + 100.0 * i / strikes for i in range(strikes)], "payoff": "otm"}],
    }


def empty_app() -> FastAPI:
    """Endpoints that take and answer what /v1/smiles does, and compute nothing: as the framework has it (schemas in
    and out), and with the body validated raw and ready objects encoded."""
    app = FastAPI(openapi_url=None)
    answers = {n: _answer(n) for n in (STRIKES, MANY)}
    objects = {n: SmilesAnswer.model_validate(answer) for n, answer in answers.items()}

    @app.post(PLAIN, response_model_exclude_none=True)
    async def plain(asked: SmilesAsked) -> SmilesAnswer:
        return objects[len(asked.slices[0].strikes)]

    @app.post(RAW)
    async def raw(request: Request) -> Response:
        asked = SmilesAsked.model_validate_json(await request.body())
        return Response(encode(answers[len(asked.slices[0].strikes)]), media_type="application/json")

    return app


def _answer(n: int) -> dict[str, Any]:
    column = [1.0 / (3.0 + i) for i in range(n)]
    one = {
        **FIXED,
        "strikes": column,
        "payoffs": ["call"] * n,
        "statuses": ["ok"] * n,
        "prices": column,
        "implied_vols": column,
        "error_bounds": column,
        "transform": {"method": "contour_fft", "exponents": [0.5], "nodes": 56},
    }
    return {"slices": [one], "warnings": []}


def service_app() -> FastAPI:
    """The service as it comes, its log aside."""
    return create_app(Settings(access_log=False))
