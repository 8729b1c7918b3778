"""Jobs on the event loop: blocking work of the store in a few threads, waiting without a thread."""

from __future__ import annotations

import asyncio
import hashlib
from collections.abc import Awaitable, Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from time import perf_counter
from typing import Final, TypeVar

from service.compute import Compute
from service.jobs.kinds import JobKind, JobStopped
from service.jobs.running import Runner
from service.jobs.store import Job, JobStore, StoreDown, Submitted
from service.logs import LOGGER
from service.problems import Problem
from service.settings import Settings

__all__ = ["Desk", "Receipt"]

Result = TypeVar("Result")
_THREADS: Final = 4
_STORE_SECONDS: Final = 5.0  # then the store is taken to be down, whatever its thread still does
_HERE_SECONDS: Final = 4.0  # that a waited-for job may be computed in the serving process
_HAND_OVER: Final = 1.0  # more, before workers take it if this process has died meanwhile
_FIRST_LOOK, _LAST_LOOK = 0.005, 0.1


@dataclass(frozen=True, slots=True)
class Receipt:
    """A job after its submission, and the seconds computed for it in this process (None: none)."""

    job: Job
    engine_seconds: float | None


class Desk:
    """Takes jobs of one app. Nothing is opened or started before the first.

    ``stopping`` says whether the server is about to end. It waits for open streams, so they break off then, and their
    readers come back to another server."""

    def __init__(self, settings: Settings, compute: Compute) -> None:
        self.stopping: Callable[[], bool] = lambda: False
        self.settings = settings
        self.store = JobStore(settings)
        self._compute = compute
        self._pool = ThreadPoolExecutor(_THREADS, thread_name_prefix="jobs")
        self._later: set[asyncio.Task[None]] = set()

    async def close(self) -> None:
        """End what was started."""
        if self._later:
            await asyncio.gather(*self._later, return_exceptions=True)
        self._pool.shutdown(wait=True, cancel_futures=True)
        self.store.close()

    async def ask(self, work: Callable[[], Result]) -> Result:
        """Run a call of the store in a thread; raises Problem where the store does not answer."""
        try:
            call = asyncio.get_running_loop().run_in_executor(self._pool, work)
            return await asyncio.wait_for(call, _STORE_SECONDS)
        except (StoreDown, TimeoutError) as error:
            LOGGER.warning("the store of jobs does not answer", extra={"fields": {"reason": repr(error.__cause__)}})
            raise Problem(
                "jobs-unavailable",
                "The store of jobs does not answer; nothing was accepted. Everything else is served as usual.",
                headers={"Retry-After": str(self.settings.retry_after)},
            ) from None

    async def prepare(self, work: Callable[[], Result]) -> Result:
        """Read a large body in a computing thread."""
        return await self._compute.away(work)

    async def submit(
        self, kind: JobKind, body: bytes, *, owner: str, key: str | None, total: int, wait: int
    ) -> Receipt:
        """Make a job or find it again by its key; with ``wait``, come back when it is over or the seconds are."""
        here = wait > 0 and total == 1 and self._compute.accepting
        budget = min(float(wait), _HERE_SECONDS)
        delay = budget + _HAND_OVER if here else 0.0
        made = await self.ask(
            lambda: self.store.submit(kind.name, body, owner=owner, key=key, total=total, delay=delay)
        )
        self._same_body(made, body)
        end = perf_counter() + wait
        seconds = None
        if here and made.fresh:
            seconds = await self._compute_here(kind, made.job, budget)
        if wait > 0 and not made.job.over:
            return Receipt(await self._wait(made.job, end), seconds)
        return Receipt(made.job, seconds)

    async def find(self, kind: JobKind, job: str, *, owner: str) -> Job:
        """A job of this owner; raises Problem where there is none."""
        found = await self.ask(lambda: self.store.find(kind.name, job, owner=owner))
        if found is None:
            raise Problem("no-such-job", "You have no job with this id, or it was forgotten when its time was over.")
        return found

    def _same_body(self, made: Submitted, body: bytes) -> None:
        if not made.fresh and made.job.digest != hashlib.sha256(body).hexdigest():
            raise Problem(
                "idempotency-key-reused",
                f"This Idempotency-Key came with another body before, which made job {made.job.id}.",
            )

    async def _compute_here(self, kind: JobKind, job: Job, budget: float) -> float | None:
        """Compute a job of one piece in this process, for a caller who waits; workers have it after the budget."""
        runner = Runner(self.store.blobs, {kind.name: kind})
        end = perf_counter() + budget

        def work() -> float | None:
            begin = perf_counter()
            try:
                runner.compute(kind.name, job.id, job.digest, 0, 1, before=end)
                seconds = perf_counter() - begin
                runner.finish(kind.name, job.id, job.digest)
            except JobStopped:
                return None
            except Exception as error:
                LOGGER.error("job failed", exc_info=error, extra={"fields": {"job": job.id}})
                runner.fail(job.id)
                return None
            return seconds

        try:
            return await self._compute.away(work)
        except Problem:  # too much to do here
            return None
        finally:
            self._soon(lambda: self.ask(lambda: self.store.release(job.id)))

    def _soon(self, call: Callable[[], Awaitable[None]]) -> None:
        """Do something after the answer; if it fails, the delay of the job does the same later."""

        async def quiet() -> None:
            try:
                await call()
            except Problem:
                pass

        task = asyncio.create_task(quiet())
        self._later.add(task)
        task.add_done_callback(self._later.discard)

    async def _wait(self, job: Job, end: float) -> Job:
        """The job once it is over, or as it is at the end of the wait."""
        pause = _FIRST_LOOK
        while not self.store.blobs.has(job.id, "outcome.json"):
            left = end - perf_counter()
            if left <= 0.0:
                break
            await asyncio.sleep(min(pause, left))
            pause = min(1.5 * pause, _LAST_LOOK)
        found = await self.ask(lambda: self.store.find(job.kind, job.id, owner=job.owner))
        return found or job
