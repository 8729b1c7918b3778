"""The job protocol, through HTTP alone: submit, wait, follow, look up, list, cancel, idempotency, refusals."""

from __future__ import annotations

import json
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import httpx
import pytest

from service.demo.server import running_server
from service.jobs.pool import running_workers
from service.settings import Settings
from tests.contract.contract import Contract

PATH = "/v1/calibrations"
ONE, EVENTS = PATH + "/{id}", PATH + "/{id}/events"
SLICES = [
    {"expiry": 0.25, "strikes": [90.0, 100.0, 110.0], "implied_vols": [0.24, 0.205, 0.185]},
    {"expiry": 1.0, "strikes": [80.0, 100.0, 120.0], "implied_vols": [0.25, 0.214, 0.19]},
]
VOLS = {"market": {"spot": 100.0, "rate": 0.02, "dividend_yield": 0.01}, "slices": SLICES}


def body(count: int = 1, **members: Any) -> dict[str, Any]:
    """A request for so many surfaces, all alike."""
    surfaces = [{"id": f"S{i}", "vols": VOLS} for i in range(count)]
    return {"model": "black", "surfaces": surfaces, **members}


@pytest.fixture(scope="module")
def jobs(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Contract]:
    """A server with a store of its own and one worker."""
    settings = Settings(data_dir=str(tmp_path_factory.mktemp("jobs")), access_log=False)
    with running_workers(settings, 1), running_server(settings) as base:
        with httpx.Client(base_url=base, timeout=60.0) as client:
            contract = Contract(client, client.get("/openapi.json").json())
            while client.get(PATH).status_code == 503:  # until the worker has made the store
                pass
            yield contract


@pytest.fixture(scope="module")
def without_workers(tmp_path_factory: pytest.TempPathFactory, jobs: Contract) -> Iterator[Contract]:
    """A server whose jobs nobody takes, on a store that a worker has made."""
    settings = Settings(data_dir=str(tmp_path_factory.mktemp("idle")), access_log=False)
    with running_workers(settings, 1), running_server(settings) as base:
        while httpx.get(base + PATH).status_code == 503:
            pass
    with running_server(settings) as base, httpx.Client(base_url=base, timeout=60.0) as client:
        yield Contract(client, jobs.document)


def submit(jobs: Contract, sent: dict[str, Any], **headers: str) -> httpx.Response:
    answer = jobs.client.post(PATH, json=sent, headers={name.replace("_", "-"): v for name, v in headers.items()})
    assert answer.status_code in (200, 202), answer.text
    jobs.hold(answer, "post", PATH)
    return answer


def look(jobs: Contract, job: str) -> dict[str, Any]:
    answer = jobs.client.get(f"{PATH}/{job}")
    assert answer.status_code == 200, answer.text
    jobs.hold(answer, "get", ONE)
    return dict(answer.json())


def heard(jobs: Contract, job: str, last: str | None = None) -> list[tuple[str, str, dict[str, Any]]]:
    """Every event of a job until its stream ends: id, kind, data."""
    headers = {"Last-Event-ID": last} if last else {}
    with jobs.client.stream("GET", f"{PATH}/{job}/events", headers=headers) as stream:
        assert stream.status_code == 200
        assert stream.headers["Content-Type"].startswith("text/event-stream")
        blocks = "".join(stream.iter_text()).split("\n\n")
    events = []
    for block in blocks:
        fields = dict(line.split(": ", 1) for line in block.splitlines() if not line.startswith(":"))
        if "event" in fields:
            events.append((fields["id"], fields["event"], json.loads(fields["data"])))
    return events


def test_a_waiting_caller_gets_the_result(jobs: Contract) -> None:
    answer = submit(jobs, body(), Prefer="wait=20")
    job = answer.json()
    assert (answer.status_code, job["status"]) == (200, "succeeded")
    assert answer.headers["Preference-Applied"] == "wait=20"
    assert answer.headers["Location"] == job["links"]["self"] == f"{PATH}/{job['id']}"
    assert job["progress"] == {"done": 1, "total": 1}
    assert job["created_at"] <= job["started_at"] <= job["finished_at"] < job["expires_at"]
    assert [one["id"] for one in job["result"]["surfaces"]] == ["S0"]
    assert look(jobs, job["id"]) == job


def test_a_job_is_followed_to_its_end(jobs: Contract) -> None:
    answer = submit(jobs, body(20))
    job = answer.json()
    assert (answer.status_code, job["result"], job["problem"]) == (202, None, None)
    events = heard(jobs, job["id"])
    *progress, (name, kind, end) = events
    assert (name, kind, end["status"], end["progress"]) == ("end", "end", "succeeded", {"done": 20, "total": 20})
    done = [data["done"] for _, kind, data in progress]
    assert done == sorted(set(done)) and done[-1] == 20
    assert all(kind == "progress" and name == str(data["done"]) for name, kind, data in progress)
    found = look(jobs, job["id"])
    assert [one["id"] for one in found["result"]["surfaces"]] == [f"S{i}" for i in range(20)]
    assert "result" not in end


def test_events_resume_after_the_last_one_heard(jobs: Contract) -> None:
    job = submit(jobs, body(3), Prefer="wait=20").json()["id"]
    assert [name for name, _, _ in heard(jobs, job)] == ["3", "end"]
    assert [name for name, _, _ in heard(jobs, job, last="2")] == ["3", "end"]
    assert [name for name, _, _ in heard(jobs, job, last="3")] == ["end"]
    over = jobs.client.get(f"{PATH}/{job}/events", headers={"Last-Event-ID": "end"})
    assert (over.status_code, over.content) == (204, b"")


def test_one_key_and_body_make_one_job(jobs: Contract) -> None:
    first = submit(jobs, body(), Idempotency_Key="marks 1").json()["id"]
    again = submit(jobs, body(), Idempotency_Key="marks 1", Prefer="wait=20").json()
    assert (again["id"], again["status"]) == (first, "succeeded")
    assert submit(jobs, body(), Idempotency_Key="marks 2").json()["id"] != first
    refusal = jobs.refused(PATH, body(2), headers={"Idempotency-Key": "marks 1"})
    assert (refusal.status, refusal.kind) == (422, "idempotency-key-reused")
    assert first in refusal.detail


def test_twenty_callers_with_one_key_at_once_make_one_job(jobs: Contract) -> None:
    def send(_: int) -> tuple[str, str]:
        with httpx.Client(base_url=jobs.client.base_url, timeout=60.0) as client:
            answer = client.post(PATH, json=body(2), headers={"Idempotency-Key": "at once", "Prefer": "wait=20"})
            assert answer.status_code in (200, 202), answer.text
            return answer.json()["id"], answer.json()["status"]

    with ThreadPoolExecutor(20) as pool:
        answers = set(pool.map(send, range(20)))
    assert len(answers) == 1
    ((job, status),) = answers
    assert status == "succeeded"
    page = jobs.client.get(PATH, params={"limit": 200}).json()["jobs"]
    assert [one["id"] for one in page].count(job) == 1


def test_a_queued_job_waits_and_is_cancelled(without_workers: Contract) -> None:
    jobs = without_workers
    answer = submit(jobs, body(2), Prefer="wait=1")
    job = answer.json()
    assert (answer.status_code, job["status"], job["started_at"]) == (202, "queued", None)
    cancelled = jobs.client.delete(f"{PATH}/{job['id']}")
    jobs.hold(cancelled, "delete", ONE)
    assert cancelled.json()["status"] == "cancelled"
    assert jobs.client.delete(f"{PATH}/{job['id']}").json() == cancelled.json() == look(jobs, job["id"])
    assert [name for name, _, _ in heard(jobs, job["id"])] == ["0", "end"]


def test_a_waiting_caller_is_served_without_any_worker(without_workers: Contract) -> None:
    """A job of one surface is computed where it is waited for."""
    assert submit(without_workers, body(), Prefer="wait=20").json()["status"] == "succeeded"


def test_pages_of_the_list_hold_every_job_once(without_workers: Contract) -> None:
    jobs = without_workers
    made = {submit(jobs, body()).json()["id"] for _ in range(7)}
    seen: list[str] = []
    cursor: dict[str, str] = {}
    while True:
        answer = jobs.client.get(PATH, params={"limit": 3, "status": "queued", **cursor})
        jobs.hold(answer, "get", PATH)
        page = answer.json()
        assert all(one["status"] == "queued" and "result" not in one for one in page["jobs"])
        seen += [one["id"] for one in page["jobs"]]
        if page["next_cursor"] is None:
            break
        assert len(page["jobs"]) == 3
        cursor = {"cursor": page["next_cursor"]}
    assert len(seen) == len(set(seen)) and made <= set(seen)
    states = [one["status"] for one in jobs.client.get(PATH, params={"status": "cancelled"}).json()["jobs"]]
    assert set(states) <= {"cancelled"}


@pytest.mark.parametrize("query", ["status=done", "limit=0", "limit=201", "limit=x", "cursor=x", "cursor=!", "page=2"])
def test_a_bad_query_is_refused(jobs: Contract, query: str) -> None:
    refusal = jobs.problem(jobs.client.get(f"{PATH}?{query}"), "get", PATH)
    assert (refusal.status, refusal.kind) == (422, "invalid-query")
    assert query.partition("=")[0] in refusal.detail


@pytest.mark.parametrize("key", ["", "x" * 256, "tab\there"])
def test_a_bad_key_is_refused(jobs: Contract, key: str) -> None:
    refusal = jobs.refused(PATH, body(), headers={"Idempotency-Key": key})
    assert (refusal.status, refusal.kind) == (422, "invalid-header")


@pytest.mark.parametrize("method", ["get", "delete"])
def test_an_unknown_job_is_not_found(jobs: Contract, method: str) -> None:
    for job in ("5f0c7d1e9a4b4c86b2f3a1d0e7c69584", "x", "..%2F.."):
        answer = jobs.client.request(method, f"{PATH}/{job}")
        assert (answer.status_code, answer.headers["Content-Type"]) == (404, "application/problem+json")
    assert jobs.problem(jobs.client.get(f"{PATH}/x/events"), "get", EVENTS).kind == "no-such-job"


def test_a_server_whose_store_nobody_made_says_so_at_once_and_prices(tmp_path: Path) -> None:
    with running_server(Settings(data_dir=str(tmp_path), access_log=False)) as base:
        with httpx.Client(base_url=base, timeout=60.0) as client:
            jobs = Contract(client, client.get("/openapi.json").json())
            refusal = jobs.refused(PATH, body())
            assert (refusal.status, refusal.kind) == (503, "jobs-unavailable")
            assert int(refusal.answer.headers["Retry-After"]) >= 1
            smile = {"forward": 100.0, "discount_factor": 1.0, "expiry": 1.0, "strikes": [100.0], "payoff": "call"}
            jobs.post("/v1/smiles", {"model": {"name": "black", "volatility": 0.2}, "slices": [smile]})
