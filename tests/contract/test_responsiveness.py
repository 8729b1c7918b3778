"""CPU work never holds the event loop. Judged by the order of events, never by seconds."""

from __future__ import annotations

import threading
from typing import Any

import httpx

from tests.contract.requests import lewis

SURFACE: dict[str, Any] = lewis(
    slices=[
        {"expiry": 0.05 + 0.02 * i, "strikes": [40.0 + 0.12 * j for j in range(1000)], "payoff": "otm"}
        for i in range(100)
    ]
)


def test_health_answers_while_a_surface_of_100_slices_by_1000_strikes_is_priced(base: str) -> None:
    """Of the health checks sent while the surface is priced, one after the other, many come back before it does; the
    longest of them takes a small part of the surface's own time."""
    body = httpx.Request("POST", base, json=SURFACE).content
    with httpx.Client(base_url=base, timeout=60.0) as client:
        client.get("/healthz")
        begun, answers = threading.Event(), []

        def price() -> None:
            begun.set()
            headers = {"Content-Type": "application/json"}
            answers.append(httpx.post(f"{base}/v1/smiles", content=body, headers=headers, timeout=60.0))

        pricing = threading.Thread(target=price)
        pricing.start()
        begun.wait()
        waits = []
        while pricing.is_alive():
            answer = client.get("/healthz")
            assert answer.status_code == 200
            waits.append(answer.elapsed.total_seconds())
        pricing.join()
    (surface,) = answers
    assert surface.status_code == 200
    assert len(surface.json()["slices"]) == 100
    assert len(waits) >= 20
    assert max(waits) < 0.5 * surface.elapsed.total_seconds()
    assert sorted(waits)[len(waits) // 2] < 0.1 * surface.elapsed.total_seconds()
