"""Answers about jobs, for the OpenAPI document and the tests."""

from __future__ import annotations

from typing import Literal

from service.documentation import ProblemAnswer
from service.fields import Answer, described

__all__ = ["JobAnswer", "JobLinks", "JobListAnswer", "JobProgress", "JobState", "JobSummary"]

JobState = Literal["queued", "running", "succeeded", "failed", "cancelled"]
_EXAMPLE_ID = "5f0c7d1e9a4b4c86b2f3a1d0e7c69584"
_TIME = "2026-03-16T08:00:00.000Z"
_LINKS = {
    name: f"/v1/calibrations/{_EXAMPLE_ID}{page}"
    for name, page in (("self", ""), ("events", "/events"), ("report", "/report"))
}


class JobProgress(Answer):
    """How much of a job is done."""

    done: int = described("Pieces done.", unit="count", example=120)
    total: int = described("Pieces in all.", unit="count", example=500)


class JobLinks(Answer):
    """Where the rest is."""

    self: str = described("The job.", unit="none", example=_LINKS["self"])
    events: str = described("Its progress as server-sent events.", unit="none", example=_LINKS["events"])
    report: str | None = described(
        "A page to look at, once it has succeeded; absent for kinds of job without one.",
        unit="none",
        example=_LINKS["report"],
        default=None,
    )


class JobSummary(Answer):
    """A job without its result."""

    id: str = described("The job's id.", unit="none", example=_EXAMPLE_ID)
    kind: str = described("What it is.", unit="none", example="calibrations")
    status: JobState = described(
        "queued, running, or how it ended: succeeded, failed, cancelled.", unit="none", example="succeeded"
    )
    created_at: str = described("When it was made.", unit="date and time, UTC", example=_TIME)
    started_at: str | None = described(
        "When the first piece was begun; null until then.", unit="date and time, UTC", example=_TIME
    )
    finished_at: str | None = described("When it ended; null until then.", unit="date and time, UTC", example=_TIME)
    expires_at: str = described(
        "When it is forgotten, if it has ended by then.", unit="date and time, UTC", example="2026-03-23T08:00:00.000Z"
    )
    progress: JobProgress = described("How much is done.", unit="count", example={"done": 120, "total": 500})
    problem: ProblemAnswer | None = described(
        "Why it failed; null unless it did. A fault of one piece is told in the result instead.",
        unit="none",
        example=None,
    )
    links: JobLinks = described("Addresses of what belongs to it.", unit="none", example=_LINKS)


class JobAnswer(JobSummary):
    """A job; kinds say what their result is."""


class JobListAnswer(Answer):
    """The caller's own jobs of one kind, the latest first."""

    jobs: list[JobSummary] = described("The jobs of this page, without results.", unit="none", example=[])
    next_cursor: str | None = described(
        "Give it as cursor to get the next page; null at the end.", unit="none", example=None
    )
