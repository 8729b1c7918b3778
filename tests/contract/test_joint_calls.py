"""Small requests that arrive together are computed in one call of the engine: each has the answer it has alone."""

from __future__ import annotations

import asyncio
from typing import Any

import httpx
import pytest

from service.app import create_app
from service.settings import Settings
from tests.contract.requests import lewis

SMILES, GREEKS = "/v1/smiles", "/v1/greeks"
IMPOSSIBLE = {"name": "variance_gamma", "sigma": 1.0, "theta": 0.6, "nu": 1.0}


@pytest.fixture
def calls(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """Slices of every call of the engine."""
    from service.greeks import mapping as greeks
    from service.smiles import mapping as smiles

    seen: list[int] = []

    def counted(plain: Any) -> Any:
        def call(models: Any, slices: Any, **options: Any) -> Any:
            seen.append(len(slices))
            return plain(models, slices, **options)

        return call

    monkeypatch.setattr(smiles, "price_smiles", counted(smiles.price_smiles))
    monkeypatch.setattr(greeks, "price_greeks", counted(greeks.price_greeks))
    return seen


def send(requests: list[tuple[str, dict[str, Any]]], **settings: Any) -> list[httpx.Response]:
    """Answers to requests that are all sent before any is answered, to an app in this process."""

    async def all_of_them() -> list[httpx.Response]:
        app = create_app(Settings(access_log=False, **settings))
        transport = httpx.ASGITransport(app)
        async with httpx.AsyncClient(transport=transport, base_url="http://service") as client:
            return list(await asyncio.gather(*(client.post(path, json=body) for path, body in requests)))

    return asyncio.run(all_of_them())


def bodies(count: int, **members: Any) -> list[dict[str, Any]]:
    """Requests that differ in model, expiry, market and number of slices."""
    out = []
    for i in range(count):
        slices = [
            {"expiry": 0.1 + 0.3 * i + j, "strikes": [70.0 + 5.0 * i, 100.0, 130.0], "payoff": "otm"}
            for j in range(1 + i % 3)
        ]
        body = lewis(slices=slices, **members)
        body["model"]["v0"] = 0.03 + 0.005 * i
        body["market"]["spot"] = 95.0 + i
        out.append(body)
    return out


def agree(together: dict[str, Any], alone: dict[str, Any]) -> None:
    """Prices, and Greeks where there are any, within the bounds of both."""
    for x, y in zip(together["slices"], alone["slices"], strict=True):
        assert x["strikes"] == y["strikes"] and x["statuses"] == y["statuses"] and x["forward"] == y["forward"]
        pairs = [(x["prices"], y["prices"], x["error_bounds"], y["error_bounds"])]
        for kind, bounds in (("greeks", "greek_error_bounds"), ("sensitivities", "sensitivity_error_bounds")):
            for name in x.get(kind, {}):
                pairs.append((x[kind][name], y[kind][name], x[bounds][name], y[bounds][name]))
        for columns in pairs:
            for a, b, c, d in zip(*columns, strict=True):
                assert abs(a - b) <= c + d


@pytest.mark.parametrize("path", [SMILES, GREEKS])
def test_answers_are_those_of_requests_alone(calls: list[int], path: str) -> None:
    members = {} if path == SMILES else {"greeks": ["delta", "theta", "vega"], "sensitivities": True}
    sent = bodies(6, **members)
    together = send([(path, body) for body in sent])
    assert [answer.status_code for answer in together] == [200] * 6
    assert calls == [sum(len(body["slices"]) for body in sent)]  # one call
    for body, answer in zip(sent, together, strict=True):
        (alone,) = send([(path, body)])
        agree(answer.json(), alone.json())
    assert calls[1:] == [len(body["slices"]) for body in sent]


def test_only_requests_for_the_same_share_a_call(calls: list[int]) -> None:
    """Tolerances, outputs and resources apart: one call each."""
    plain, loose, bare, other = bodies(4)
    loose["tolerance"] = 1e-6
    bare["outputs"] = ["price"]
    requests = [(SMILES, plain), (SMILES, loose), (SMILES, bare), (GREEKS, other), (SMILES, plain)]
    answers = send(requests)
    assert [answer.status_code for answer in answers] == [200] * 5
    assert sorted(calls) == sorted([2, len(loose["slices"]), len(bare["slices"]), len(other["slices"])])
    assert "implied_vols" not in answers[2].json()["slices"][0]
    assert answers[0].json() == answers[4].json()


def test_a_fault_of_one_is_not_that_of_the_others(calls: list[int]) -> None:
    """A model that admits no forward is found by the engine: the call fails as a whole, then each is on its own."""
    sent = bodies(4)
    sent[2]["model"] = IMPOSSIBLE
    answers = send([(SMILES, body) for body in sent])
    assert [answer.status_code for answer in answers] == [200, 200, 422, 200]
    assert answers[2].json()["errors"][0]["pointer"] == "/model/nu"
    assert calls[0] == sum(len(body["slices"]) for body in sent) and len(calls) == 5


def test_a_call_too_large_is_cut(calls: list[int]) -> None:
    """At most eight requests, and at most twice as many strikes as a small request may have."""
    send([(SMILES, lewis()) for _ in range(20)])
    assert calls == [8, 8, 4]
    calls.clear()
    send([(SMILES, lewis()) for _ in range(6)], inline_strikes=7)  # five strikes each: two in a call
    assert calls == [2, 2, 2]
    calls.clear()
    answers = send([(SMILES, lewis()) for _ in range(3)], inline_nodes=0)  # none may be computed on the loop
    assert [answer.status_code for answer in answers] == [200] * 3
