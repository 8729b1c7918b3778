"""What a kind of job is: how its request falls into pieces, how a piece is computed, how the pieces become a result.

A piece is what is computed without a pause: a second or so, so that cancelling and taking over are quick. It depends on
the request and its index alone, so that it may be computed anywhere, and twice, with the same bytes as answer.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

__all__ = ["JobKind", "JobStopped", "Work"]


class JobStopped(Exception):
    """The job was cancelled, or nobody waits for it here any more; what was begun is dropped."""


class Work(Protocol):
    """A request, read."""

    @property
    def count(self) -> int:
        """Number of pieces, at least one."""

    def compute(self, index: int, check: Callable[[], None]) -> bytes:
        """The JSON of one piece. Calls ``check`` now and then and lets JobStopped pass. A fault inside a piece is part
        of its result; an exception is a defect and fails the job."""

    def failed(self, index: int, reason: str) -> bytes:
        """The JSON of a piece that could not be computed: the processes that tried it ended each time."""

    def join(self, pieces: Sequence[bytes]) -> bytes:
        """The JSON of the result."""


@dataclass(frozen=True, slots=True)
class JobKind:
    """One kind: ``name`` as in its path, ``open`` to read a request that was validated when it was accepted,
    ``chunk`` pieces to a step that one worker takes, ``pages`` further resources of a job as words of its links."""

    name: str
    open: Callable[[bytes], Work]
    chunk: int
    pages: tuple[str, ...] = ()
