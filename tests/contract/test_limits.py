"""Limits are settings; each refusal names the limit and its value, and nothing larger is looked at."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import httpx
import pytest

from service.demo.server import running_server
from service.settings import Settings, SettingsError
from tests.contract.contract import Contract, Refusal
from tests.contract.requests import LEWIS, changed, lewis

PATH = "/v1/smiles"
JSON = {"Content-Type": "application/json"}


@pytest.fixture(scope="module")
def narrow() -> Iterator[Contract]:
    """A server with small limits."""
    settings = Settings(max_body_bytes=4096, max_slices=3, max_strikes=40, max_nodes=1024, inline_nodes=0)
    with running_server(settings) as base, httpx.Client(base_url=base, timeout=60.0) as client:
        yield Contract(client, client.get("/openapi.json").json())


def test_a_million_strikes(contract: Contract) -> None:
    """Within the body limit, over the strike limit."""
    content = b'{"model": {"name": "black", "volatility": 0.2}, "slices": [{"expiry": 1, "forward": 100, '
    content += b'"discount_factor": 1, "payoff": "call", "strikes": [' + b",".join([b"100"] * 1_000_000) + b"]}]}"
    refusal = contract.refused(PATH, content=content, headers=JSON)
    assert (refusal.status, refusal.kind) == (422, "limit-exceeded")
    assert "1000000 strikes" in refusal.faults["/slices"]
    assert "200000 (setting SMILEWRIGHT_MAX_STRIKES)" in refusal.faults["/slices"]


@pytest.mark.parametrize("chunked", [False, True])
def test_a_body_of_100_megabytes(contract: Contract, chunked: bool) -> None:
    """Refused by its stated length, and where none is stated as soon as it is too long."""
    piece = b" " * 1_000_000
    content: Any = (piece for _ in range(100)) if chunked else piece * 100
    refusal = contract.refused(PATH, content=content, headers=JSON)
    assert (refusal.status, refusal.kind) == (413, "body-too-large")
    assert "8388608 bytes" in refusal.detail and "SMILEWRIGHT_MAX_BODY_BYTES" in refusal.detail
    assert contract.client.get("/healthz").status_code == 200


def test_a_body_over_a_smaller_limit(narrow: Contract) -> None:
    refusal = narrow.refused(PATH, content=b" " * 4097, headers=JSON)
    assert (refusal.status, refusal.kind) == (413, "body-too-large") and "4096 bytes" in refusal.detail
    fitting = narrow.refused(PATH, content=b" " * 4096, headers=JSON)
    assert fitting.kind == "not-json"


@pytest.mark.parametrize(
    ("slices", "setting"),
    [
        ([{"expiry": 1.0, "strikes": [100.0], "payoff": "call"}] * 4, "3 (setting SMILEWRIGHT_MAX_SLICES)"),
        ([{"expiry": 1.0, "strikes": [100.0] * 21, "payoff": "call"}] * 2, "40 (setting SMILEWRIGHT_MAX_STRIKES)"),
    ],
)
def test_counts_over_a_limit(narrow: Contract, slices: list[Any], setting: str) -> None:
    refusal = narrow.refused(PATH, lewis(slices=slices))
    assert (refusal.status, refusal.kind) == (422, "limit-exceeded")
    assert setting in refusal.faults["/slices"]


def test_a_chain_over_the_strike_limit(narrow: Contract) -> None:
    columns = dict.fromkeys(("call_bids", "call_asks", "put_bids", "put_asks"), [None] * 41)
    refusal = narrow.refused("/v1/chains", {"expiries": [{"expiry": 1.0, "strikes": [100.0] * 41, **columns}]})
    assert "SMILEWRIGHT_MAX_STRIKES" in refusal.faults["/expiries"]


def test_transform_nodes_over_the_limit(narrow: Contract, contract: Contract) -> None:
    """The least tolerance over strikes six hundred times apart needs many rows; refused before it is computed. Both
    servers live in this process, where rows of an exact repeat are kept and need no nodes: hence another v0."""
    hard = changed(
        lewis(tolerance=1e-14),
        "/slices/0",
        {"expiry": 0.01, "strikes": [4.0 * 1.2**i for i in range(36)], "payoff": "otm"},
    )
    nodes = contract.post(PATH, hard)["slices"][0]["transform"]["nodes"]
    assert nodes > 1024
    refusal = narrow.refused(PATH, changed(hard, "/model/v0", 0.041))
    assert (refusal.status, refusal.kind) == (422, "limit-exceeded")
    assert "1024 (setting SMILEWRIGHT_MAX_NODES)" in refusal.faults["/slices"]
    assert narrow.post(PATH, LEWIS)["slices"]


def test_a_full_queue_is_told_at_once() -> None:
    """One thread, nobody may wait: while a surface is computed the service is not ready and sends others away."""
    settings = Settings(compute_threads=1, compute_queue=0, inline_strikes=0, retry_after=7)
    large = lewis(slices=[{"expiry": 0.1 + 0.01 * i, "strikes": [80.0] * 1500, "payoff": "otm"} for i in range(100)])
    with running_server(settings) as base, httpx.Client(base_url=base, timeout=60.0) as client:
        contract = Contract(client, client.get("/openapi.json").json())
        while client.get("/readyz").status_code != 200:
            pass
        refused: Refusal | None = None
        with ThreadPoolExecutor(1) as threads:
            for _ in range(10):
                surface = threads.submit(httpx.post, f"{base}{PATH}", json=large, timeout=60.0)
                while refused is None and not surface.done():
                    ready = client.get("/readyz")
                    if ready.status_code == 503 and client.get("/healthz").status_code == 200:
                        answer = client.post(PATH, json=LEWIS)
                        refused = contract.problem(answer, "post", PATH) if answer.status_code == 503 else None
                        assert "queue" in ready.json()["detail"]
                assert surface.result().status_code == 200
                if refused is not None:
                    break
        assert refused is not None and refused.kind == "overloaded"
        assert refused.answer.headers["Retry-After"] == "7"
        contract.post(PATH, LEWIS)


def test_settings_come_from_the_environment() -> None:
    got = Settings.from_environment({"SMILEWRIGHT_MAX_STRIKES": "7", "SMILEWRIGHT_ACCESS_LOG": "false", "PATH": "x"})
    assert (got.max_strikes, got.access_log, got.port) == (7, False, 8000)


def test_every_bad_setting_is_named() -> None:
    bad = {"SMILEWRIGHT_PORT": "http", "SMILEWRIGHT_MAX_STRIKE": "7", "SMILEWRIGHT_COMPUTE_QUEUE": "-1"}
    with pytest.raises(SettingsError) as caught:
        Settings.from_environment(bad)
    for name in bad:
        assert name in str(caught.value)
