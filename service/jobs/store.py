"""What a serving process does with jobs: submit, look up, list, cancel.

The durable engine is DBOS: a job is one of its workflows, its id the workflow's, its owner the authenticated user.
Submitting is one insert in a transaction of our own, because the library's client waits for a store that is away.
Whether a job is over is said by its outcome file (``service.jobs.blobs``), which is decided once; the store
says whether it exists, whose it is, and whether it waits or runs.
"""

from __future__ import annotations

import contextlib
import hashlib
import itertools
import secrets
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from threading import Lock
from typing import TYPE_CHECKING, Any, Final, Literal

import orjson

from service.jobs.blobs import Blobs
from service.jobs.database import IMPATIENT, READY, job_folder, open_engine
from service.settings import Settings

if TYPE_CHECKING:
    from dbos import DBOSClient, WorkflowStatus

__all__ = [
    "APPLICATION",
    "JOBS",
    "JOB_WORKFLOW",
    "Job",
    "JobStore",
    "Place",
    "State",
    "StoreDown",
    "Submitted",
    "wait_for_store",
]

Place = tuple[int, int, str]
State = Literal["queued", "running", "succeeded", "failed", "cancelled"]
APPLICATION: Final = "smilewright"
JOBS: Final = "jobs"
JOB_WORKFLOW: Final = "run_job"
_OVER: Final = ("SUCCESS", "ERROR", "CANCELLED", "MAX_RECOVERY_ATTEMPTS_EXCEEDED")
_ROWS: Final[dict[State, tuple[str, ...]]] = {
    "queued": ("ENQUEUED", "DELAYED"),
    "running": ("PENDING", "ENQUEUED", "DELAYED"),
    "succeeded": ("SUCCESS", "PENDING", "ENQUEUED", "DELAYED"),
    "failed": ("SUCCESS", "ERROR", "MAX_RECOVERY_ATTEMPTS_EXCEEDED", "PENDING"),
    "cancelled": ("CANCELLED", "SUCCESS", "PENDING", "ENQUEUED", "DELAYED"),
}
_PAGE: Final = 200
_TRY_READ: Final = f"SELECT 1 FROM smilewright_beats WHERE name = '{READY}'"
_TRY_WRITE: Final = "DELETE FROM smilewright_beats WHERE name = ''"


class StoreDown(Exception):
    """The store cannot be used now."""


@dataclass(frozen=True, slots=True)
class Job:
    """A job as the store and its files have it. Times are seconds since 1970; ``digest`` is that of the body; ``place``
    orders jobs as the store does, which counts in seconds on SQLite, and by time and id within those."""

    id: str
    kind: str
    owner: str
    digest: str
    total: int
    done: int
    state: State
    created: float
    started: float | None
    finished: float | None
    problem: dict[str, Any] | None
    place: Place

    @property
    def over(self) -> bool:
        """Whether it has ended."""
        return self.finished is not None


@dataclass(frozen=True, slots=True)
class Submitted:
    """The job of a submission; ``fresh`` where this call made it."""

    job: Job
    fresh: bool


class JobStore:
    """The store as a serving process uses it; nothing is opened before the first call. Every method blocks for up to a
    few seconds and raises StoreDown: call it in a thread."""

    def __init__(self, settings: Settings) -> None:
        self.blobs = Blobs(job_folder(settings))
        self._settings = settings
        self._client: DBOSClient | None = None
        self._engine: Any = None
        self._opening = Lock()

    def close(self) -> None:
        """Close what was opened."""
        if self._client is not None:
            self._client.destroy()
            self._engine.dispose()
            self._client = self._engine = None

    def submit(
        self, kind: str, body: bytes, *, owner: str, key: str | None, total: int, delay: float = 0.0
    ) -> Submitted:
        """Make a job, or find the one that this owner made with this key. ``delay`` keeps workers from it for so many
        seconds, for a caller in whose process it is computed meanwhile."""
        digest = hashlib.sha256(body).hexdigest()
        job = _id(kind, owner, key)
        options: dict[str, Any] = {
            "workflow_name": JOB_WORKFLOW,
            "queue_name": JOBS,
            "workflow_id": job,
            "workflow_id_reuse_policy": "reject",
            "authenticated_user": owner,
            "serialization_type": "portable",
            "attributes": {"kind": kind, "digest": digest, "total": total, "at": round(1e3 * time.time())},
            "application_name": APPLICATION,
        }
        if delay > 0.0:
            options["delay_seconds"] = delay
        from dbos import error

        with self._guarded() as client:
            self.blobs.put(job, f"request-{digest}.json", body)
            try:
                with self._engine.begin() as connection:
                    client.enqueue_in_transaction(connection, options, kind, job, digest)  # type: ignore[arg-type]
            except error.DBOSWorkflowIDInUseError:
                return Submitted(self._known(client, job), fresh=False)
            return Submitted(self._known(client, job), fresh=True)

    def find(self, kind: str, job: str, *, owner: str) -> Job | None:
        """A job of this owner, or None."""
        with self._guarded() as client:
            rows = client.list_workflows(workflow_ids=[job], load_input=False, load_output=False)
        found = [self._job(row) for row in rows if row.authenticated_user == owner]
        return found[0] if found and found[0].kind == kind else None

    def page(self, kind: str, *, owner: str, state: State | None, limit: int, before: Place | None) -> Sequence[Job]:
        """Jobs of this owner, the latest first, after the one that is at ``before``."""
        found: list[Job] = []
        status = list(_ROWS[state]) if state else None
        with self._guarded() as client:
            for row in self._rows(client, owner, status):
                if len(found) >= limit and (row.created_at or 0) < found[-1].place[0]:
                    break  # read on through those that the store takes to be made at the same time
                about = row.attributes or {}
                if about.get("kind") != kind or (before is not None and _place(row) >= before):
                    continue
                job = self._job(row)
                if state is None or job.state == state:
                    found.append(job)
        found.sort(key=lambda one: one.place, reverse=True)
        return found[:limit]

    @staticmethod
    def _rows(client: DBOSClient, owner: str, status: list[str] | None) -> Iterator[WorkflowStatus]:
        """An owner's jobs, the latest first."""
        for offset in itertools.count(0, _PAGE):
            rows = client.list_workflows(
                user=owner,
                name=JOB_WORKFLOW,
                status=status,
                sort_desc=True,
                limit=_PAGE,
                offset=offset,
                load_input=False,
                load_output=False,
            )
            yield from rows
            if len(rows) < _PAGE:
                return

    def cancel(self, job: Job) -> Job:
        """End a job that is not over; the job as it is then."""
        with self._guarded(write=True) as client:
            if self.end(job.id, "cancelled"):
                client.cancel_workflow(job.id, cancel_children=True)
            return self._known(client, job.id)

    def end(self, job: str, state: State, problem: dict[str, Any] | None = None) -> bool:
        """Decide the outcome of a job; whether it was this call that did."""
        return end_job(self.blobs, job, state, problem)

    def release(self, job: str) -> None:
        """Let workers have a job at once that was submitted with a delay."""
        with self._guarded(write=True) as client:
            client.set_workflow_delay(job, delay_seconds=0.0)

    def _known(self, client: DBOSClient, job: str) -> Job:
        (row,) = client.list_workflows(workflow_ids=[job], load_input=False, load_output=False)
        return self._job(row)

    def _job(self, row: WorkflowStatus) -> Job:
        about = row.attributes or {}
        total = int(about["total"])
        outcome = orjson.loads(self.blobs.get(row.workflow_id, "outcome.json") or b"null")
        started = orjson.loads(self.blobs.get(row.workflow_id, "started.json") or b"null")
        begun = started["at"] if started else None
        state: State = "running" if begun is not None else "queued"
        finished, problem = None, None
        if outcome is not None:
            state, finished, problem = outcome["state"], outcome["at"], outcome["problem"]
        elif row.status in _OVER:  # the engine gave it up, or its files were taken away
            state, finished, problem = "failed", (row.completed_at or row.updated_at or 0) / 1e3, LOST
        whole = state == "succeeded"
        return Job(
            id=row.workflow_id,
            kind=str(about["kind"]),
            owner=row.authenticated_user or "",
            digest=str(about["digest"]),
            total=total,
            done=total if whole else min(self.blobs.pieces_done(row.workflow_id), total),
            state=state,
            created=int(about["at"]) / 1e3,
            started=begun,
            finished=finished,
            problem=problem,
            place=_place(row),
        )

    @contextlib.contextmanager
    def _guarded(self, *, write: bool = False) -> Iterator[DBOSClient]:
        """The client of a store that answers now; StoreDown for whatever the database or the folder raise. The
        library's client waits for a lock without end, so before it writes the lock is tried for."""
        import sqlalchemy as sa

        try:
            with self._opening:
                if self._client is None:
                    self._open()
            client = self._client
            assert client is not None
            with self._engine.begin() as connection:
                if write:
                    connection.execute(sa.text(_TRY_WRITE))
                if connection.execute(sa.text(_TRY_READ)).first() is None:
                    raise StoreDown("not made yet")
            yield client
        except (sa.exc.SQLAlchemyError, OSError) as error:
            raise StoreDown(type(error).__name__) from error

    def _open(self) -> None:
        from dbos import DBOSClient, DBOSPortableJSONSerializer

        self._engine = open_engine(self._settings, patience=IMPATIENT)
        self._client = DBOSClient(
            system_database_engine=self._engine,
            serializer=DBOSPortableJSONSerializer(),
            application_name=APPLICATION,
            lazy=True,
            retry_connection_errors=False,
        )


def wait_for_store(settings: Settings, *, seconds: float) -> bool:
    """Wait until a worker has made the store; whether it has."""
    store = JobStore(settings)
    end = time.monotonic() + seconds
    try:
        while True:
            with contextlib.suppress(StoreDown):
                store.find("", "", owner="")
                return True
            if time.monotonic() > end:
                return False
            time.sleep(0.05)
    finally:
        store.close()


LOST: Final[dict[str, Any]] = {
    "type": "/problems/job-lost",
    "title": "The job was lost",
    "status": 500,
    "detail": "The job was given up: its files are gone, or it failed each time it was begun.",
}


def end_job(blobs: Blobs, job: str, state: State, problem: dict[str, Any] | None = None) -> bool:
    """Write the outcome of a job; whether it was this call that did."""
    return blobs.put(job, "outcome.json", orjson.dumps({"state": state, "at": time.time(), "problem": problem}))


def _place(row: WorkflowStatus) -> Place:
    return row.created_at or 0, int((row.attributes or {})["at"]), row.workflow_id


def _id(kind: str, owner: str, key: str | None) -> str:
    """An id: random, or the same one for the same owner, kind and key. The owner's name cannot be read from it."""
    if key is None:
        return secrets.token_hex(16)
    return hashlib.sha256("\0".join((kind, owner, key)).encode()).hexdigest()[:32]
