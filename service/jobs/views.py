"""A job as it is sent."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

import orjson

from service.encoding import encode
from service.jobs.blobs import Blobs
from service.jobs.kinds import JobKind
from service.jobs.store import Job
from service.settings import Settings

__all__ = ["job_body", "job_path", "job_summary"]


def job_path(job: Job) -> str:
    """Where a job is."""
    return f"/v1/{job.kind}/{job.id}"


def job_summary(job: Job, kind: JobKind, settings: Settings) -> dict[str, Any]:
    """A job without its result."""
    path = job_path(job)
    return {
        "id": job.id,
        "kind": job.kind,
        "status": job.state,
        "created_at": _moment(job.created),
        "started_at": None if job.started is None else _moment(job.started),
        "finished_at": None if job.finished is None else _moment(job.finished),
        "expires_at": _moment(job.created + 3_600.0 * settings.job_retention_hours),
        "progress": {"done": job.done, "total": job.total},
        "problem": None if job.problem is None else {**job.problem, "instance": job.id},
        "links": {"self": path, "events": f"{path}/events", **{page: f"{path}/{page}" for page in kind.pages}},
    }


def job_body(job: Job, kind: JobKind, settings: Settings, blobs: Blobs) -> bytes:
    """A job with its result, the result's bytes as they were kept."""
    kept = blobs.get(job.id, "result.json") if job.state == "succeeded" else None
    result = None if kept is None else orjson.Fragment(kept)
    return encode({**job_summary(job, kind, settings), "result": result})


def _moment(seconds: float) -> str:
    return datetime.fromtimestamp(seconds, UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
