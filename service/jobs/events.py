"""The progress of a job as server-sent events (WHATWG HTML, section 9.2).

Two kinds of event. ``progress`` has the job's progress as data and the number of pieces done as id; ``end`` has the job
without its result, and the id ``end``. Whoever comes back with Last-Event-ID hears only what is new; after ``end`` the
answer is 204, which tells a browser to stay away.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import AsyncIterator
from typing import Final

from service.encoding import encode
from service.jobs.desk import Desk
from service.jobs.kinds import JobKind
from service.jobs.store import Job
from service.jobs.views import job_summary
from service.problems import Problem

__all__ = ["END", "events"]

END: Final = "end"
_FIRST_LOOK, _LAST_LOOK = 0.02, 0.25
_SIGN_SECONDS: Final = 15.0  # of silence, then a comment keeps the connection from being taken for dead
_FIRST: Final = b"retry: 1000\n\n"  # milliseconds until a browser comes back


async def events(desk: Desk, kind: JobKind, job: Job, *, seen: str | None) -> AsyncIterator[bytes]:
    """Bytes of the stream from after the event ``seen`` until the job is over."""
    told = int(seen) if seen and seen.isdecimal() and len(seen) < 10 else -1
    spoke, pause = time.monotonic(), _FIRST_LOOK
    yield _FIRST
    while not desk.stopping():
        if job.done > told:
            told, spoke, pause = job.done, time.monotonic(), _FIRST_LOOK
            yield _event(str(told), "progress", {"done": job.done, "total": job.total, "status": job.state})
        if job.over:
            yield _event(END, END, job_summary(job, kind, desk.settings))
            return
        if time.monotonic() - spoke > _SIGN_SECONDS:
            spoke = time.monotonic()
            yield b": still here\n\n"
        await asyncio.sleep(pause)
        pause = min(1.3 * pause, _LAST_LOOK)
        try:
            job = await desk.find(kind, job.id, owner=job.owner)
        except Problem as problem:
            if problem.kind.name != "jobs-unavailable":
                return  # forgotten meanwhile


def _event(name: str, kind: str, data: object) -> bytes:
    return b"id: %s\nevent: %s\ndata: %s\n\n" % (name.encode(), kind.encode(), encode(data))
