"""What every answer has, whatever it answers: ids, times, problems, methods, logs, metrics; models and probes."""

from __future__ import annotations

import asyncio
import json
import logging
import re
from collections.abc import Iterator
from typing import Any

import httpx
import pytest

from engine import MODELS
from service.app import create_app
from service.logs import JsonLines
from service.problems import KINDS
from service.settings import Settings
from tests.contract.contract import Contract
from tests.contract.requests import LEWIS, changed

TRACE = "0af7651916cd43dd8448eb211c80319c"


def test_a_sane_request_id_is_kept(client: httpx.Client) -> None:
    answer = client.get("/healthz", headers={"X-Request-Id": "desk-7:2026.1_a"})
    assert answer.headers["X-Request-Id"] == "desk-7:2026.1_a"


@pytest.mark.parametrize("given", ["", "x" * 65, "two words", "<script>", "a\tb", "-dash-first", "é"])
def test_another_request_id_is_replaced(client: httpx.Client, given: str) -> None:
    answer = client.get("/healthz", headers={"X-Request-Id": given.encode()})
    assert re.fullmatch(r"[0-9a-f]{32}", answer.headers["X-Request-Id"])


def test_server_timing_has_engine_and_total(contract: Contract) -> None:
    answer = contract.client.post("/v1/smiles", json=LEWIS)
    found = re.fullmatch(r"engine;dur=([0-9.]+), total;dur=([0-9.]+)", answer.headers["Server-Timing"])
    assert found and 0.0 < float(found[1]) <= float(found[2])
    assert answer.headers["X-Content-Type-Options"] == "nosniff"


@pytest.mark.parametrize("path", ["/v1", "/v1/smiles/", "/v2/smiles", "/problems/none", "/assets/x.js", "/healthz/x"])
def test_nothing_there(client: httpx.Client, path: str) -> None:
    answer = client.get(path)
    assert answer.status_code == 404
    assert answer.headers["Content-Type"] == "application/problem+json"
    assert answer.json()["type"] == "/problems/not-found"


@pytest.mark.parametrize(
    ("method", "path", "allowed"),
    [
        ("GET", "/v1/smiles", "POST"),
        ("DELETE", "/v1/chains", "POST"),
        ("POST", "/v1/models", "GET"),
        ("PUT", "/", "GET"),
    ],
)
def test_another_method(client: httpx.Client, method: str, path: str, allowed: str) -> None:
    answer = client.request(method, path)
    assert answer.status_code == 405
    assert answer.json()["type"] == "/problems/method-not-allowed"
    assert answer.headers["Allow"] == allowed and allowed in answer.json()["detail"]


@pytest.mark.parametrize("path", ["/", "/healthz", "/v1/models", "/docs", "/openapi.json"])
def test_head_is_get_without_a_body(client: httpx.Client, path: str) -> None:
    head, whole = client.head(path), client.get(path)
    assert (head.status_code, head.content) == (200, b"")
    assert head.headers["Content-Length"] == str(len(whole.content))


def test_models_are_those_of_the_engine(contract: Contract) -> None:
    answer = contract.client.get("/v1/models")
    contract.hold(answer, "get", "/v1/models")
    models = {model["name"]: model for model in answer.json()["models"]}
    assert set(models) == set(MODELS) >= {"black", "heston"}
    rho = next(p for p in models["heston"]["parameters"] if p["name"] == "rho")
    assert (rho["lower"], rho["upper"], rho["lower_open"], rho["upper_open"]) == (-1.0, 1.0, True, True)
    assert rho["allowed"] == "-1 < rho < 1" and rho["unit"] == "dimensionless"
    assert "1993" in models["heston"]["source"]


def _with(model: dict[str, Any], name: str, value: float) -> dict[str, Any]:
    """A copy of a model object with one parameter set; ``factors.0.rho`` is that of the first factor."""
    return changed(model, "/" + name.replace(".", "/"), value)


def _usual(told: dict[str, Any]) -> dict[str, Any]:
    """A model object of the example values told."""
    model: dict[str, Any] = {"name": told["name"]}
    for parameter in told["parameters"]:
        if "." in parameter["name"]:
            array, place, inner = parameter["name"].split(".")
            places = model.setdefault(array, [])
            places.extend({} for _ in range(int(place) + 1 - len(places)))
            places[int(place)][inner] = parameter["example"]
        else:
            model[parameter["name"]] = parameter["example"]
    return model


def test_every_model_told_can_be_priced(contract: Contract) -> None:
    """Its examples as they stand, over a short and a long expiry; parity holds."""
    for told in contract.client.get("/v1/models").json()["models"]:
        slices = [
            {"expiry": expiry, "strikes": [90.0, 110.0, 90.0, 110.0], "payoff": ["call", "call", "put", "put"]}
            for expiry in (0.1, 2.0)
        ]
        for found in contract.post("/v1/smiles", {**LEWIS, "model": _usual(told), "slices": slices})["slices"]:
            calls, puts = found["prices"][:2], found["prices"][2:]
            for call, put, strike in zip(calls, puts, (90.0, 110.0), strict=True):
                forward = found["discount_factor"] * (found["forward"] - strike)
                assert call - put == pytest.approx(forward, rel=1e-9), told["name"]


def test_the_ranges_told_are_the_ranges_kept(contract: Contract) -> None:
    """Both ends of every range: refused where open and beyond; admitted where closed, unless with the other values no
    forward exists (Variance Gamma), which the answer says."""
    for told in contract.client.get("/v1/models").json()["models"]:
        for parameter in told["parameters"]:
            name = parameter["name"]
            for end, away in (("lower", -1.0), ("upper", 1.0)):
                for value in (parameter[end], parameter[end] + away):
                    body = {**LEWIS, "model": _with(_usual(told), name, value)}
                    answer = contract.client.post("/v1/smiles", json=body)
                    contract.hold(answer, "post", "/v1/smiles")
                    faults = answer.json().get("errors", [])
                    if value != parameter[end] or parameter[f"{end}_open"]:
                        assert [fault["pointer"] for fault in faults] == ["/model/" + name.replace(".", "/")]
                        assert "must be" in faults[0]["detail"]
                    else:
                        assert answer.status_code == 200 or "no forward exists" in faults[0]["detail"], answer.text


def test_probes(contract: Contract) -> None:
    alive = contract.client.get("/healthz")
    contract.hold(alive, "get", "/healthz")
    assert alive.json()["status"] == "alive"
    for _ in range(1000):
        ready = contract.client.get("/readyz")
        contract.hold(ready, "get", "/readyz")
        if ready.status_code == 200:
            break
    assert ready.status_code == 200
    assert {check["name"]: check["ok"] for check in ready.json()["checks"]} == {
        "engine": True,
        "queue": True,
        "serving": True,
    }


def test_not_ready_says_what_is_not() -> None:
    """An app whose lifespan never began has neither warmed up nor begun to serve; it is alive all the same."""

    async def ask() -> tuple[httpx.Response, httpx.Response]:
        transport = httpx.ASGITransport(app=create_app(Settings(retry_after=3)))
        async with httpx.AsyncClient(transport=transport, base_url="http://here") as client:
            return await client.get("/readyz"), await client.get("/healthz")

    ready, alive = asyncio.run(ask())
    assert (ready.status_code, ready.headers["Retry-After"], alive.status_code) == (503, "3", 200)
    assert ready.json()["type"] == "/problems/not-ready"
    assert {check["name"] for check in ready.json()["checks"] if not check["ok"]} == {"engine", "serving"}


def test_metrics_count_by_route(contract: Contract) -> None:
    def counts() -> dict[str, float]:
        text = contract.client.get("/metrics").text
        lines = [line.rpartition(" ") for line in text.splitlines() if not line.startswith("#")]
        return {name: float(value) for name, _, value in lines}

    before = counts()
    contract.post("/v1/smiles", LEWIS)
    contract.refused("/v1/smiles", {})
    contract.client.get("/nowhere/at/all")
    after = counts()
    label = 'route="/v1/smiles"'
    for name, more in (
        (f'smilewright_http_requests_total{{method="POST",{label},status="200"}}', 1),
        (f'smilewright_http_requests_total{{method="POST",{label},status="422"}}', 1),
        ('smilewright_http_requests_total{method="GET",route="unmatched",status="404"}', 1),
        (f'smilewright_problems_total{{problem="invalid-request",{label}}}', 1),
        (f"smilewright_strikes_total{{{label}}}", 5),
        (f"smilewright_engine_seconds_count{{{label}}}", 1),
    ):
        assert after[name] - before.get(name, 0.0) == more, name
    assert after["smilewright_compute_capacity"] == 64 + Settings().compute_threads
    assert "nowhere" not in str(after)


@pytest.fixture
def lines() -> Iterator[list[dict[str, Any]]]:
    """What the service logs, each line read back from the JSON it would be."""
    found: list[dict[str, Any]] = []

    class Keep(logging.Handler):
        def emit(self, record: logging.LogRecord) -> None:
            found.append(json.loads(self.format(record)))

    handler, logger = Keep(), logging.getLogger("smilewright")
    handler.setFormatter(JsonLines())
    level = logger.level
    logger.addHandler(handler)
    logger.setLevel(logging.INFO)
    yield found
    logger.removeHandler(handler)
    logger.setLevel(level)


def _ask(app: Any, *requests: dict[str, Any]) -> list[httpx.Response]:
    async def send() -> list[httpx.Response]:
        transport = httpx.ASGITransport(app=app, raise_app_exceptions=False)
        async with httpx.AsyncClient(transport=transport, base_url="http://here") as client:
            return [await client.request(**one) for one in requests]

    return asyncio.run(send())


def test_each_request_has_one_line_in_the_log(lines: list[dict[str, Any]]) -> None:
    """W3C trace context: version 00, trace id, parent id, flags."""
    headers = {"traceparent": f"00-{TRACE}-b7ad6b7169203331-01", "X-Request-Id": "abc"}
    body = {**LEWIS, "model": {"name": "black", "volatility": 0.1234567}}
    _ask(
        create_app(Settings()),
        {"method": "POST", "url": "/v1/smiles", "json": body, "headers": headers},
        {"method": "GET", "url": "/nope", "headers": {"traceparent": f"00-{TRACE}-0000000000000000-01"}},
    )
    priced, missing = lines
    assert (priced["message"], priced["request_id"], priced["trace_id"]) == ("request", "abc", TRACE)
    assert priced["parent_id"] == "b7ad6b7169203331"
    assert (priced["path"], priced["status"], priced["strikes"]) == ("/v1/smiles", 200, 5)
    assert 0.0 < priced["engine_ms"] <= priced["total_ms"]
    assert (missing["status"], missing["problem"]) == (404, "not-found") and "trace_id" not in missing
    assert "1234567" not in json.dumps([priced, missing])  # no value of a body


def test_an_unexpected_fault_leaves_no_trace_in_the_answer(lines: list[dict[str, Any]]) -> None:
    app = create_app(Settings())

    async def broken() -> None:
        raise ValueError("the secret is 42")

    app.add_api_route("/broken", broken)
    (answer,) = _ask(app, {"method": "GET", "url": "/broken"})
    assert answer.status_code == 500
    assert answer.json()["type"] == "/problems/internal-error"
    assert "secret" not in answer.text and "Traceback" not in answer.text and ".py" not in answer.text
    assert answer.json()["instance"] == answer.headers["X-Request-Id"]
    fault = next(line for line in lines if line["level"] == "error")
    assert fault["request_id"] == answer.headers["X-Request-Id"] and "secret is 42" in fault["traceback"]


def test_every_kind_of_problem_has_a_page(client: httpx.Client) -> None:
    overview = client.get("/problems").text
    for kind in KINDS.values():
        page = client.get(f"/problems/{kind.name}")
        assert page.status_code == 200 and page.headers["Content-Type"].startswith("text/html")
        assert kind.title in page.text and str(kind.status) in page.text
        assert f"/problems/{kind.name}" in overview
