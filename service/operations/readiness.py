"""Whether the service can take work, and what cannot."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass

from service.compute import Compute
from service.logs import LOGGER
from service.self_test import SelfTest, run_self_test
from service.settings import Settings

__all__ = ["Check", "Readiness"]


@dataclass(frozen=True, slots=True)
class Check:
    """One thing the service needs."""

    name: str
    ok: bool
    detail: str


class Readiness:
    """Starting, ready, stopping. Ready once the engine has priced a published smile, which also warms it up."""

    def __init__(self, settings: Settings, compute: Compute) -> None:
        self.retry_after = settings.retry_after
        self._compute = compute
        self._self_test: SelfTest | None = None
        self._fault = ""
        self._serving = False

    @asynccontextmanager
    async def while_serving(self) -> AsyncIterator[None]:
        """Warm up in the background; not ready any more on the way out."""
        self._serving = True
        warm_up = asyncio.create_task(self._warm_up())
        try:
            yield
        finally:
            self._serving = False
            await warm_up

    async def _warm_up(self) -> None:
        try:
            self._self_test = await self._compute.away(run_self_test)
        except Exception as error:
            self._fault = "the self-test against published prices fails; the log says how"
            LOGGER.error("self-test failed", exc_info=error)

    def checks(self) -> list[Check]:
        """The state of everything the service needs."""
        test = self._self_test
        if test is None:
            engine = Check("engine", False, self._fault or "is warming up")
        elif not test.covered:
            engine = Check("engine", False, "misses published prices by more than its own error bounds")
        else:
            engine = Check("engine", True, f"prices of a published table within {test.worst:.1e}")
        compute = self._compute
        queue = f"{compute.held} of at most {compute.capacity} requests held"
        return [
            engine,
            Check("queue", compute.accepting or not self._serving, queue),
            Check("serving", self._serving, "taking requests" if self._serving else "is stopping"),
        ]
