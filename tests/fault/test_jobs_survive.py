"""Processes killed and the store taken away while jobs run: no job is lost, none is done twice over, and its result is
that of an undisturbed run, byte for byte. On the embedded store in the fast tests, on PostgreSQL under the marker."""

from __future__ import annotations

import json
import os
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import httpx
import orjson
import pytest
from sqlalchemy import text

from service.jobs.database import PATIENT, open_engine
from service.jobs.pool import worker_environment
from service.jobs.store import Job, JobStore
from service.jobs.worker import SILENT_SECONDS
from service.settings import Settings
from tests.fault.postgres import Postgres
from tests.fault.processes import await_, finished, price, ready, server, surfaces, workers
from tests.fault.sleepers import COMMAND, expected

ME = "me"
AWAY = {"embedded": 2.0, "postgresql": 10.0}  # seconds that the store is away


@pytest.fixture(scope="module")
def postgres() -> Iterator[Postgres]:
    server = Postgres()
    yield server
    server.close()


@pytest.fixture(params=["embedded", pytest.param("postgresql", marks=pytest.mark.fault)])
def place(request: pytest.FixtureRequest) -> str:
    """Which store."""
    return str(request.param)


@pytest.fixture
def settings(place: str, tmp_path: Path, request: pytest.FixtureRequest) -> Settings:
    found = {} if place == "embedded" else {"job_store": request.getfixturevalue("postgres").database()}
    return Settings(data_dir=str(tmp_path), job_workers=2, access_log=False, **found)


@pytest.fixture
def embedded(tmp_path: Path) -> Settings:
    return Settings(data_dir=str(tmp_path), job_workers=2, access_log=False)


@pytest.fixture
def store(settings: Settings) -> Iterator[JobStore]:
    made = JobStore(settings)
    yield made
    made.close()


def submit(store: JobStore, kind: str, body: bytes, total: int) -> Job:
    return store.submit(kind, body, owner=ME, key=None, total=total).job


def sleepers(store: JobStore, pieces: int, seconds: float, fault: str = "") -> Job:
    body = json.dumps({"pieces": pieces, "seconds": seconds, "fault": fault}).encode()
    return submit(store, "sleepers", body, pieces)


def done(store: JobStore, job: Job) -> int:
    return store.blobs.pieces_done(job.id)


def test_a_worker_killed_in_mid_job_changes_nothing(settings: Settings, store: JobStore) -> None:
    """One of two workers is killed outright; the other takes over what it was at."""
    assert SILENT_SECONDS < 15.0
    body = surfaces(60)
    with workers(settings, 2) as running:
        await_(lambda: ready(store))
        undisturbed = submit(store, "calibrations", body, 60)
        _, wanted = finished(store, undisturbed)
        job = submit(store, "calibrations", body, 60)
        await_(lambda: done(store, job) > 4)
        running[0].kill()
        killed = time.monotonic()
        assert done(store, job) < 60, "the worker was killed too late to show anything"
        found, result = finished(store, job)
        print(f"finished {time.monotonic() - killed:.1f} s after the kill")
    assert found.state == "succeeded"
    assert result == wanted
    assert [one["id"] for one in result["surfaces"]] == [f"S{i}" for i in range(60)]
    assert store.blobs.get(job.id, "result.json") == store.blobs.get(undisturbed.id, "result.json")


def test_every_worker_killed_and_another_started(settings: Settings, store: JobStore) -> None:
    """What was running is run again; pieces that were done are not."""
    with workers(settings, 2, COMMAND) as running:
        await_(lambda: ready(store))
        job = sleepers(store, 12, 0.2)
        await_(lambda: done(store, job) >= 4)
        for one in running:
            one.kill()
    kept = done(store, job)
    before = [store.blobs.piece(job.id, index) for index in range(12)]
    with workers(settings, 1, COMMAND):
        found, result = finished(store, job)
    assert found.state == "succeeded" and result == expected(12)
    assert 4 <= kept < 12 and sum(piece is not None for piece in before) == kept


def test_the_server_killed_right_after_it_accepted(settings: Settings, store: JobStore) -> None:
    """The job was promised: its workers do it although nobody is left to ask, and then end."""
    with server(settings) as (process, base):
        await_(lambda: ready(store))
        answer = httpx.post(
            f"{base}/v1/calibrations", content=surfaces(20), headers={"Content-Type": "application/json"}
        )
        process.send_signal(signal.SIGKILL)
        process.wait()
        assert answer.status_code == 202
        job = answer.json()["id"]
        await_(lambda: store.blobs.has(job, "outcome.json"))
        result = orjson.loads(store.blobs.get(job, "result.json") or b"null")
        assert [one["id"] for one in result["surfaces"]] == [f"S{i}" for i in range(20)]
        assert all(one["status"] in ("converged", "at_bound") for one in result["surfaces"])
        await_(lambda: not _beating(settings))


def _beating(settings: Settings) -> list[str]:
    """Workers that have not left in good order."""
    engine = open_engine(settings, patience=PATIENT)
    with engine.connect() as connection:
        rows = connection.execute(text("SELECT name FROM smilewright_beats WHERE name <> 'ready'")).fetchall()
    engine.dispose()
    return [name for (name,) in rows]


def test_the_store_taken_away(place: str, settings: Settings, store: JobStore, request: pytest.FixtureRequest) -> None:
    """Submissions are refused at once and say when to come back, pricing notices nothing, the running job is finished,
    and what was refused does not appear later."""
    with server(settings) as (_process, base):
        await_(lambda: ready(store))
        headers = {"Content-Type": "application/json", "Idempotency-Key": "again"}
        first = httpx.post(
            f"{base}/v1/calibrations", content=surfaces(60), headers=headers | {"Idempotency-Key": "one"}
        )
        assert first.status_code == 202
        with _locked(settings) if place == "embedded" else _stopped(request.getfixturevalue("postgres")):
            end = time.monotonic() + AWAY[place]
            while time.monotonic() < end:
                refused = httpx.post(f"{base}/v1/calibrations", content=surfaces(3), headers=headers, timeout=60.0)
                assert refused.status_code == 503, refused.text
                assert refused.json()["type"] == "/problems/jobs-unavailable"
                assert int(refused.headers["Retry-After"]) >= 1
                assert price(base) == 200
        again = await_(lambda: _accepted(base, headers))
        page = httpx.get(f"{base}/v1/calibrations").json()["jobs"]
        assert [one["id"] for one in page] == [again, first.json()["id"]]
        for job in (first.json()["id"], again):
            await_(lambda job=job: store.blobs.has(job, "outcome.json"))
            ended = httpx.get(f"{base}/v1/calibrations/{job}").json()
            assert ended["status"] == "succeeded", ended["problem"]


def _accepted(base: str, headers: dict[str, str]) -> str | None:
    answer = httpx.post(f"{base}/v1/calibrations", content=surfaces(3), headers=headers, timeout=60.0)
    return str(answer.json()["id"]) if answer.status_code in (200, 202) else None


@contextmanager
def _locked(settings: Settings) -> Iterator[None]:
    """The embedded store, locked for everybody else who writes."""
    base = sqlite3.connect(Path(settings.data_dir) / "jobs.sqlite", isolation_level=None, timeout=30.0)
    base.execute("BEGIN EXCLUSIVE")
    yield
    base.execute("ROLLBACK")
    base.close()


@contextmanager
def _stopped(server: Postgres) -> Iterator[None]:
    server.stop()
    yield
    server.start()


def test_a_running_job_of_500_surfaces_is_cancelled(settings: Settings, store: JobStore) -> None:
    """Nothing is computed any more two seconds after it was cancelled, and the next job is begun."""
    with workers(settings, 2):
        await_(lambda: ready(store))
        job = submit(store, "calibrations", surfaces(500), 500)
        await_(lambda: done(store, job) > 10)
        cancelled = store.cancel(job)
        time.sleep(2.0)
        kept = done(store, job)
        after = submit(store, "calibrations", surfaces(2), 2)
        found, _ = finished(store, after)
        assert found.state == "succeeded"
        assert cancelled.state == "cancelled" and done(store, job) == kept < 500
        again = store.find("calibrations", job.id, owner=ME)
        assert again is not None and again.state == "cancelled" and again.problem is None
        assert store.blobs.get(job.id, "result.json") is None


def test_a_worker_told_to_stop_leaves_its_jobs_to_others(settings: Settings, store: JobStore) -> None:
    """TERM ends it in good order, after the piece it is at."""
    with workers(settings, 2, COMMAND) as running:
        await_(lambda: ready(store))
        job = sleepers(store, 16, 0.2)
        await_(lambda: done(store, job) >= 4)
        running[0].terminate()
        assert running[0].wait(60) == 0
        found, result = finished(store, job)
    assert found.state == "succeeded" and result == expected(16)


def test_a_defect_fails_the_job_and_not_the_worker(settings: Settings, store: JobStore) -> None:
    with workers(settings, 1, COMMAND):
        await_(lambda: ready(store))
        for pieces in (1, 6):
            found, result = finished(store, sleepers(store, pieces, 0.0, fault="raise"))
            assert (found.state, result) == ("failed", None)
            assert found.problem is not None and found.problem["type"] == "/problems/internal-error"
            assert "a defect" not in json.dumps(found.problem)
        found, result = finished(store, sleepers(store, 3, 0.0))
        assert found.state == "succeeded" and result == expected(3)


def test_jobs_of_others_are_not_found(settings: Settings, store: JobStore) -> None:
    with workers(settings, 1, COMMAND):
        await_(lambda: ready(store))
        job = sleepers(store, 1, 0.0)
        finished(store, job)
    assert store.find("sleepers", job.id, owner="another") is None
    assert store.find("calibrations", job.id, owner=ME) is None
    assert store.page("sleepers", owner="another", state=None, limit=10, before=None) == []
    assert [one.id for one in store.page("sleepers", owner=ME, state=None, limit=10, before=None)] == [job.id]


@pytest.mark.fault
def test_a_piece_that_ends_its_process_each_time_is_given_up(settings: Settings, store: JobStore) -> None:
    """Three workers die of it; the fourth says so in the result, and the other pieces are as they should be."""
    from service.jobs.pool import running_workers

    with running_workers(settings, 1, command=COMMAND):
        await_(lambda: ready(store))
        found, result = finished(store, sleepers(store, 4, 0.0, fault="exit"))
    assert found.state == "succeeded"
    assert [result[0], *result[2:]] == [0, 4, 9]
    assert "3 times" in result[1]


def test_old_jobs_are_forgotten(tmp_path: Path) -> None:
    settings = Settings(data_dir=str(tmp_path), job_retention_hours=1e-4)  # a third of a second
    store = JobStore(settings)
    with workers(settings, 1, COMMAND):
        await_(lambda: ready(store))
        job = sleepers(store, 1, 0.0)
        finished(store, job)
        time.sleep(2.0)  # for its row in the store
    with workers(settings, 1, COMMAND):  # cleaning is the first thing a worker does once it holds the lease
        await_(lambda: store.find("sleepers", job.id, owner=ME) is None)
        await_(lambda: not store.blobs.has(job.id, "outcome.json"))
    store.close()


def test_nothing_that_was_kept_can_run_code(embedded: Settings) -> None:
    """The store holds JSON: a value that unpickles would let whoever writes to the store run code in a worker."""
    store = JobStore(embedded)
    with workers(embedded, 1, COMMAND):
        await_(lambda: ready(store))
        finished(store, sleepers(store, 4, 0.0))
        store.close()
        path = Path(embedded.data_dir) / "jobs.sqlite"
        with sqlite3.connect(path) as base:
            forms = {form for (form,) in base.execute("SELECT serialization FROM workflow_status")}
            kept = [value for (value,) in base.execute("SELECT inputs FROM workflow_input")]
            kept += [value for (value,) in base.execute("SELECT output FROM operation_outputs") if value]
        base.close()
    assert forms == {"portable_json"} and len(kept) >= 3
    for value in kept:
        json.loads(value)
    assert os.stat(path).st_mode & 0o077 == 0, "others on this machine can read the store"


def test_the_worker_command_takes_jobs_until_it_is_told_to_stop(embedded: Settings) -> None:
    """``smilewright worker`` beside a store, as on another host; TERM ends it with code 0 and its workers with it."""
    store = JobStore(embedded)
    command = [sys.executable, "-m", "service.cli", "worker", "--job-workers", "1"]
    process = subprocess.Popen(command, env=worker_environment(embedded), stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert "1 worker for the jobs of" in process.stdout.readline()
    await_(lambda: ready(store))
    found, result = finished(store, submit(store, "calibrations", surfaces(2), 2))
    process.terminate()
    assert process.wait(60) == 0
    process.stdout.close()
    store.close()
    assert found.state == "succeeded" and len(result["surfaces"]) == 2
    assert _beating(embedded) == []


def test_an_open_stream_does_not_hold_up_the_end_of_the_server(embedded: Settings) -> None:
    """Told to stop with ten minutes for running requests, a server does not spend them on a stream of events."""
    store = JobStore(embedded)
    with server(embedded.model_copy(update={"job_workers": 0, "shutdown_seconds": 600})) as (process, base):
        with workers(embedded, 1, COMMAND):
            await_(lambda: ready(store))
        answer = httpx.post(
            f"{base}/v1/calibrations", content=surfaces(2), headers={"Content-Type": "application/json"}
        )
        with httpx.stream("GET", f"{base}{answer.headers['Location']}/events", timeout=60.0) as stream:
            lines = stream.iter_lines()
            await_(lambda: next(lines).startswith("event: progress"))
            process.terminate()
            assert [line for line in lines if line.startswith("event: end")] == []
        assert process.wait(90) in (0, -signal.SIGTERM)
    store.close()
