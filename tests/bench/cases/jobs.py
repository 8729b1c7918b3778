"""What a job costs beyond its fits: a caller who waits, and many surfaces on one worker and on two."""

from __future__ import annotations

import re
import tempfile
import time
from collections.abc import Iterable
from statistics import median
from typing import Any

import httpx
import numpy as np
import orjson

from engine import MODELS, Payoff, Slice, price_smiles
from service.demo.server import running_server
from service.jobs.pool import running_workers
from service.jobs.store import JobStore, wait_for_store
from service.settings import Settings
from tests.bench.table import Table, count, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "durable jobs: waiting callers, one worker and two"
EXPIRIES = (0.08, 0.17, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
STRIKES = [float(k) for k in range(60, 155, 5)] + [100.5]  # 20
PARAMETERS = {"v0": 0.04, "kappa": 2.0, "theta": 0.05, "sigma": 0.6, "rho": -0.65}
CALLS, SURFACES = 30, 500


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Wall times: they hold for a machine that does nothing else."""
    yield _waiting(3 if watch.quick else CALLS)
    yield _many(16 if watch.quick else SURFACES)


def _surface(name: str, shift: float) -> dict[str, Any]:
    """Heston volatilities of 10 expiries and 20 strikes."""
    strikes = np.array(STRIKES)
    payoffs = np.full(strikes.shape, int(Payoff.OTM), dtype=np.uint8)
    model = MODELS["heston"](**{**PARAMETERS, "v0": PARAMETERS["v0"] + shift})
    priced = price_smiles(model, [Slice(tau, 100.0, 1.0, strikes, payoffs) for tau in EXPIRIES])
    slices = [
        {
            "expiry": tau,
            "forward": 100.0,
            "discount_factor": 1.0,
            "strikes": STRIKES,
            "implied_vols": one.implied_vols.tolist(),
        }
        for tau, one in zip(EXPIRIES, priced, strict=True)
    ]
    return {"id": name, "vols": {"slices": slices}}


def _body(many: int) -> bytes:
    return orjson.dumps({"model": "heston", "surfaces": [_surface(f"S{i}", 1e-5 * i) for i in range(many)]})


def _waiting(calls: int) -> Table:
    table = Table(
        "A caller who waits (Prefer: wait=5) for one Heston surface, 10 expiries x 20 strikes",
        ("calls", "answer, median", "fit, median", "on top, median", "on top, worst"),
        notes=["answer: seen by the caller over HTTP; fit: as Server-Timing has it; wall times"],
    )
    with tempfile.TemporaryDirectory() as folder:
        settings = Settings(data_dir=folder, access_log=False)
        with running_workers(settings, 1):
            wait_for_store(settings, seconds=60.0)
        with running_server(settings) as base, httpx.Client(base_url=base, timeout=60.0) as client:
            body, headers = _body(1), {"Content-Type": "application/json", "Prefer": "wait=5"}
            answers, fits = [], []
            for _ in range(calls + 1):
                begin = time.perf_counter()
                answer = client.post("/v1/calibrations", content=body, headers=headers)
                answers.append(time.perf_counter() - begin)
                assert answer.status_code == 200, answer.text
                fits.append(1e-3 * float(re.findall(r"engine;dur=([\d.]+)", answer.headers["Server-Timing"])[0]))
    top = [one - two for one, two in zip(answers[1:], fits[1:], strict=True)]  # the first opens the store
    table.add(
        count(calls), seconds(median(answers[1:])), seconds(median(fits[1:])), seconds(median(top)), seconds(max(top))
    )
    return table


def _many(many: int) -> Table:
    table = Table(
        f"One job of {many} such surfaces",
        ("workers", "submitted to done", "a surface", "speed-up"),
        notes=["wall times; each worker is a process with one thread"],
    )
    body, first = _body(many), 0.0
    for workers in (1, 2):
        with tempfile.TemporaryDirectory() as folder:
            settings = Settings(data_dir=folder)
            store = JobStore(settings)
            with running_workers(settings, workers):
                wait_for_store(settings, seconds=60.0)
                time.sleep(2.0)  # for the second one
                begin = time.perf_counter()
                job = store.submit("calibrations", body, owner="bench", key=None, total=many).job
                while not store.blobs.has(job.id, "outcome.json"):
                    time.sleep(0.005)
                took = time.perf_counter() - begin
            store.close()
        first = first or took
        table.add(str(workers), seconds(took), seconds(took / many), ratio(first, took))
    return table
