"""Processes that a fault test starts, watches and kills, and the jobs it gives them."""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import httpx
import orjson

from service.jobs.pool import WORKER_COMMAND, worker_environment
from service.jobs.store import Job, JobStore, StoreDown
from service.settings import Settings

__all__ = ["PATIENCE", "await_", "finished", "ready", "server", "surfaces", "workers"]

PATIENCE = 90.0  # seconds until a test gives up; nothing is judged by it


def await_(what: Callable[[], Any], *, pause: float = 0.02) -> Any:
    """The first true value of ``what``."""
    end = time.monotonic() + PATIENCE
    while time.monotonic() < end:
        found = what()
        if found:
            return found
        time.sleep(pause)
    raise AssertionError("it did not happen")


@contextmanager
def workers(settings: Settings, count: int, command: tuple[str, ...] = WORKER_COMMAND) -> Iterator[list[Any]]:
    """So many workers that nobody replaces; killed at the end."""
    environment = worker_environment(settings)
    running = [subprocess.Popen(command, env=environment, start_new_session=True) for _ in range(count)]
    try:
        yield running
    finally:
        for one in running:
            one.kill()
            one.wait()


@contextmanager
def server(settings: Settings) -> Iterator[tuple[Any, str]]:
    """``smilewright serve`` with its workers as a process of its own, and its address. Killed at the end; its
    workers hear of it by their standard input."""
    environment = worker_environment(settings) | {"SMILEWRIGHT_PORT": "0", "SMILEWRIGHT_ACCESS_LOG": "false"}
    environment |= {"SMILEWRIGHT_JOB_WORKERS": str(settings.job_workers)}
    environment |= {"SMILEWRIGHT_SHUTDOWN_SECONDS": str(settings.shutdown_seconds)}
    command = [sys.executable, "-m", "service.cli", "serve"]
    process = subprocess.Popen(command, env=environment, stdout=subprocess.PIPE, text=True)
    try:
        assert process.stdout is not None
        first = process.stdout.readline()
        yield process, first.split("listens on ")[1].split(" ")[0]
    finally:
        process.kill()
        process.wait()
        assert process.stdout is not None
        process.stdout.close()


def ready(store: JobStore) -> bool:
    """Whether a worker has made the store."""
    try:
        store.find("calibrations", "none", owner="me")
    except StoreDown:
        return False
    return True


def finished(store: JobStore, job: Job) -> tuple[Job, Any]:
    """A job once it is over, and its result."""
    await_(lambda: store.blobs.has(job.id, "outcome.json"))
    kept = store.blobs.get(job.id, "result.json")
    found = store.find(job.kind, job.id, owner=job.owner)
    assert found is not None
    return found, None if kept is None else orjson.loads(kept)


def surfaces(count: int) -> bytes:
    """A request for so many Heston fits, no two alike: volatilities of an invented index, a little apart."""
    columns = {0.25: (0.262, 0.231, 0.205, 0.186, 0.178), 1.0: (0.25, 0.231, 0.214, 0.2, 0.19)}
    bodies = []
    for i in range(count):
        slices = [
            {
                "expiry": expiry,
                "strikes": [80.0, 90.0, 100.0, 110.0, 120.0],
                "implied_vols": [v + 1e-5 * i for v in vols],
            }
            for expiry, vols in columns.items()
        ]
        market = {"spot": 100.0, "rate": 0.02, "dividend_yield": 0.01}
        bodies.append({"id": f"S{i}", "vols": {"market": market, "slices": slices}})
    return orjson.dumps({"model": "heston", "surfaces": bodies})


def price(base: str) -> int:
    """Status of a pricing request."""
    smile = {"forward": 100.0, "discount_factor": 1.0, "expiry": 1.0, "strikes": [100.0], "payoff": "call"}
    body = {"model": {"name": "black", "volatility": 0.2}, "slices": [smile]}
    return httpx.post(f"{base}/v1/smiles", json=body, timeout=60.0).status_code
