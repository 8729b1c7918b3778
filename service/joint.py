"""Small requests that arrive together are computed in one call of the engine, which costs far less than a call each.

Nothing waits for company: what is asked for in one turn of the event loop is computed in the next. A call that fails or
is refused as a whole says nothing about one request: then each is computed on its own, and has its own fault.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Hashable, Sequence
from dataclasses import dataclass
from time import perf_counter
from typing import Any, Final, TypeAlias

from engine import EngineError
from service.logs import LOGGER

__all__ = ["Joint", "JointCalls", "Outcome", "Share"]

_MOST: Final = 8  # requests in one call: more bring little, and the loop stands still meanwhile


@dataclass(frozen=True, slots=True)
class Outcome:
    """The encoded answer, and what it took: transform nodes (0 where there was no transform)."""

    body: bytes
    nodes: int = 0


@dataclass(frozen=True, slots=True)
class Joint:
    """How a request is computed with others of the same ``key``: ``work(parts, node_limit)`` gives an outcome a part,
    in their order. ``strikes``: how many it has."""

    key: Hashable
    part: Any
    strikes: int
    work: Callable[[Sequence[Any], int], list[Outcome]]


@dataclass(frozen=True, slots=True)
class Share:
    """The outcome of one request of a call, and its share of the seconds."""

    outcome: Outcome
    seconds: float


_Waiting: TypeAlias = list[tuple[Joint, asyncio.Future[Share | None]]]


class JointCalls:
    """The requests of one turn of the event loop. A call has at most ``strikes`` strikes and ``node_limit`` transform
    nodes; between two calls the loop turns. Belongs to one loop at a time."""

    def __init__(self, *, strikes: int, node_limit: int) -> None:
        self._strikes = strikes
        self._node_limit = node_limit
        self._waiting: _Waiting = []

    async def computed(self, joint: Joint) -> Share | None:
        """The outcome of a call with others; None where there were no others, or where the call failed."""
        loop = asyncio.get_running_loop()
        end: asyncio.Future[Share | None] = loop.create_future()
        self._waiting.append((joint, end))
        if len(self._waiting) == 1:
            loop.call_soon(self._compute)
        return await end

    def _compute(self) -> None:
        """One call for each group of what has come."""
        waiting, self._waiting = self._waiting, []
        groups: dict[Hashable, _Waiting] = {}
        for one in waiting:
            groups.setdefault(one[0].key, []).append(one)
        calls = [call for group in groups.values() for call in self._calls(group)]
        self._call(calls[0])
        for call in calls[1:]:
            asyncio.get_running_loop().call_soon(self._call, call)

    def _calls(self, group: _Waiting) -> list[_Waiting]:
        """A group cut into calls that are not too large."""
        calls: list[_Waiting] = [[]]
        strikes = 0
        for one in group:
            strikes += one[0].strikes
            if calls[-1] and (len(calls[-1]) == _MOST or strikes > self._strikes):
                calls.append([])
                strikes = one[0].strikes
            calls[-1].append(one)
        return calls

    def _call(self, together: _Waiting) -> None:
        shares: list[Share | None] = [None] * len(together)
        if len(together) > 1:
            begin = perf_counter()
            try:
                outcomes = together[0][0].work([joint.part for joint, _ in together], self._node_limit)
                share = (perf_counter() - begin) / len(together)
                shares = [Share(outcome, share) for outcome in outcomes]
            except EngineError:
                pass
            except Exception as error:
                LOGGER.error("unexpected fault of a joint call", exc_info=error)
        for (_, end), result in zip(together, shares, strict=True):
            if not end.done():
                end.set_result(result)
