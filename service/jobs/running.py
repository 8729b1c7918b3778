"""Computing the pieces of jobs and deciding their outcome: the same in a worker and in a serving process."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from threading import Lock
from typing import Any, Final

import orjson

from service.jobs.blobs import Blobs
from service.jobs.kinds import JobKind, JobStopped, Work
from service.jobs.store import LOST, end_job

__all__ = ["Runner"]

_TRIES: Final = 3  # of one piece, before it is taken to be what ends the processes
_LOOK_SECONDS: Final = 0.1  # between two looks at whether the job is over
_KEPT: Final = 4  # requests kept read
_FAULT: Final[dict[str, Any]] = {
    "type": "/problems/internal-error",
    "title": "The service failed",
    "status": 500,
    "detail": "An unexpected fault while the job was computed; the log of the worker has it under the job's id.",
}


class Runner:
    """Computes pieces, one at a time in this process. ``pause`` is called before each piece and may never return."""

    def __init__(self, blobs: Blobs, kinds: Mapping[str, JobKind], *, pause: Callable[[], None] = lambda: None) -> None:
        self._blobs = blobs
        self._kinds = kinds
        self._pause = pause
        self._one_at_a_time = Lock()
        self._read: dict[str, Work] = {}

    def over(self, job: str) -> bool:
        """Whether the job has an outcome."""
        return self._blobs.has(job, "outcome.json")

    def chunks(self, kind: str, job: str, digest: str) -> list[tuple[int, int]]:
        """First and last piece, the last excluded, of every step."""
        count, step = self._work(kind, job, digest).count, self._kinds[kind].chunk
        return [(first, min(first + step, count)) for first in range(0, count, step)]

    def compute(self, kind: str, job: str, digest: str, first: int, last: int, *, before: float = math.inf) -> None:
        """Compute the pieces of one step that are not there yet; raises JobStopped when the job is over, or at the
        moment ``before`` of ``time.perf_counter``."""
        work = self._work(kind, job, digest)
        for index in range(first, last):
            self._pause()
            with self._one_at_a_time:
                self._piece(work, job, index, before)

    def finish(self, kind: str, job: str, digest: str) -> None:
        """Put the pieces together and call the job succeeded."""
        if self.over(job):
            return
        if not self._blobs.has(job, "result.json"):
            work = self._work(kind, job, digest)
            found = [self._blobs.piece(job, index) for index in range(work.count)]
            pieces = [piece for piece in found if piece is not None]
            if len(pieces) < work.count:
                self.fail(job, LOST)
                return
            self._blobs.put(job, "result.json", work.join(pieces))
        end_job(self._blobs, job, "succeeded")
        self._blobs.drop_pieces(job)

    def fail(self, job: str, problem: dict[str, Any] = _FAULT) -> None:
        """Call the job failed."""
        end_job(self._blobs, job, "failed", problem)

    def wait_for_piece(self, seconds: float) -> None:
        """Wait until no piece is being computed, for so long at most."""
        self._one_at_a_time.acquire(timeout=seconds)

    def _piece(self, work: Work, job: str, index: int, before: float) -> None:
        if self.over(job):
            raise JobStopped
        if self._blobs.has(job, "result.json") or self._blobs.has(job, f"pieces/{index}"):
            return
        if not self._blobs.has(job, "started.json"):
            self._blobs.put(job, "started.json", orjson.dumps({"at": time.time()}), force=False)
        looked = time.perf_counter()

        def check() -> None:
            nonlocal looked
            now = time.perf_counter()
            if now > before:
                raise JobStopped
            if now - looked > _LOOK_SECONDS:
                looked = now
                if self.over(job):
                    raise JobStopped

        if self._blobs.count_try(job, index) > _TRIES:
            made = work.failed(index, f"the processes that computed it ended unexpectedly, {_TRIES} times")
        else:
            made = work.compute(index, check)
        if work.count == 1:  # its piece is the result
            self._blobs.put(job, "result.json", work.join([made]))
        else:
            self._blobs.put_piece(job, index, made)

    def _work(self, kind: str, job: str, digest: str) -> Work:
        work = self._read.get(job)
        if work is None:
            body = self._blobs.get(job, f"request-{digest}.json")
            if body is None:
                self.fail(job, LOST)
                raise JobStopped
            work = self._kinds[kind].open(body)
            while len(self._read) >= _KEPT:
                self._read.pop(next(iter(self._read)))
            self._read[job] = work
        return work
