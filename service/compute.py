"""The only door from the event loop to the CPU: a few threads behind a bounded queue.

Small requests are computed at once, on the loop: a change of thread costs more than a 50-strike smile takes away
from others. How small is decided twice: by the numbers of strikes and slices beforehand, and by the number of transform
nodes once the engine has planned; a plan over the allowance is refused by the engine and the request goes to a thread.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from time import perf_counter
from typing import TypeVar

from engine import RefusedError
from service.joint import Joint, JointCalls, Outcome
from service.problems import Problem, over_limit
from service.settings import Settings

__all__ = ["Compute", "Done", "Outcome", "Task"]

Result = TypeVar("Result")


@dataclass(frozen=True, slots=True)
class Task:
    """A request ready to be computed. ``work(node_limit)`` gives the outcome or raises; it touches nothing shared.
    ``strikes`` and ``slices`` say how large it is; ``light`` is false for work whose size they do not tell; ``joint``
    is how it is computed together with others."""

    work: Callable[[int], Outcome]
    strikes: int
    slices: int
    light: bool = True
    joint: Joint | None = None


@dataclass(frozen=True, slots=True)
class Done:
    """An outcome, the strikes it was for, and the seconds it took once it had begun (its share of a joint call)."""

    outcome: Outcome
    strikes: int
    seconds: float


class Compute:
    """Computing threads of one app; they start with the first request and end with ``close``."""

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._pool = ThreadPoolExecutor(settings.compute_threads, thread_name_prefix="compute")
        self._joint = JointCalls(strikes=2 * settings.inline_strikes, node_limit=settings.inline_nodes)
        self._held = 0
        self._open = True

    @property
    def held(self) -> int:
        """Requests computing or waiting in the queue."""
        return self._held

    @property
    def capacity(self) -> int:
        """The most that ``held`` can be."""
        return self._settings.compute_threads + self._settings.compute_queue

    @property
    def accepting(self) -> bool:
        """Whether another request would be taken."""
        return self._open and self._held < self.capacity

    async def run(self, task: Task) -> Done:
        """Compute a task, here if it is small, and then together with others that are."""
        limits = self._settings
        if task.light and task.strikes <= limits.inline_strikes and task.slices <= limits.inline_slices:
            if task.joint is not None:
                share = await self._joint.computed(task.joint)
                if share is not None:
                    return Done(share.outcome, task.strikes, share.seconds)
            try:
                return _timed(task, limits.inline_nodes)
            except RefusedError:
                pass
        return await self.away(lambda: self._within_limit(task))

    async def prepare_and_run(self, prepare: Callable[[], Task]) -> Done:
        """Make a task of a large body and compute it, all of it in a thread."""
        return await self.away(lambda: self._within_limit(prepare()))

    async def away(self, work: Callable[[], Result]) -> Result:
        """Run ``work`` in a thread; raises Problem ``overloaded`` when the queue is full."""
        if not self.accepting:
            raise Problem(
                "overloaded",
                f"{self._settings.compute_threads} requests are computing and {self._settings.compute_queue} wait, "
                "which is the limit.",
                headers={"Retry-After": str(self._settings.retry_after)},
            )
        self._held += 1
        try:
            return await asyncio.get_running_loop().run_in_executor(self._pool, work)
        finally:
            self._held -= 1

    def _within_limit(self, task: Task) -> Done:
        """Compute with all the transform nodes that a request may have."""
        most = self._settings.max_nodes
        try:
            return _timed(task, most)
        except RefusedError as error:
            raise over_limit(
                error.argument, "needs more transform nodes than there may be", most, "MAX_NODES"
            ) from None

    def close(self) -> None:
        """Take no more work; what runs ends, what waits is dropped."""
        self._open = False
        self._pool.shutdown(wait=True, cancel_futures=True)


def _timed(task: Task, node_limit: int) -> Done:
    begin = perf_counter()
    outcome = task.work(node_limit)
    return Done(outcome, task.strikes, perf_counter() - begin)
