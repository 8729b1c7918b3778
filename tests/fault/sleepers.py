"""Jobs whose pieces only take time: what the job protocol does can be seen without a fit. And a worker that takes them.

The request is ``{"pieces": n, "seconds": s}``; a piece squares its index. ``python -m tests.fault.sleepers`` is a
worker.
"""

from __future__ import annotations

import json
import os
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

from service.jobs.kinds import JobKind

__all__ = ["COMMAND", "SLEEPERS", "expected"]

COMMAND: Final = (sys.executable, "-m", "tests.fault.sleepers")


@dataclass(frozen=True)
class Sleep:
    count: int
    seconds: float
    fault: str

    def compute(self, index: int, check: Callable[[], None]) -> bytes:
        end = time.monotonic() + self.seconds
        while time.monotonic() < end:
            time.sleep(0.01)
            check()
        if self.fault == "raise":
            raise ValueError("a defect")
        if self.fault == "exit" and index == 1:
            os._exit(7)
        return str(index**2).encode()

    def failed(self, index: int, reason: str) -> bytes:
        return json.dumps(reason).encode()

    def join(self, pieces: Sequence[bytes]) -> bytes:
        return b"[" + b",".join(pieces) + b"]"


def _open(body: bytes) -> Sleep:
    asked = json.loads(body)
    return Sleep(asked["pieces"], asked["seconds"], asked.get("fault", ""))


SLEEPERS: Final = JobKind(name="sleepers", open=_open, chunk=2)


def expected(pieces: int) -> list[int]:
    """The result of a job of so many pieces."""
    return [index**2 for index in range(pieces)]


if __name__ == "__main__":
    from service.jobs.worker import run_worker
    from service.settings import Settings

    run_worker(Settings.from_environment(os.environ), [SLEEPERS], supervised="--supervised" in sys.argv)
