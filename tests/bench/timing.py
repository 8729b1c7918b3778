"""CPU times by best of n: the smallest is the run least disturbed by the rest of the machine.

CPU time of this process (user and system, all its threads), so that a neighbour who takes the processor away does not
count; what a neighbour does to caches and clock rates still does, hence the best of many short rounds. Calls that are
compared are timed in turn (a, b, a, b, ...), so that a machine that slows down in the middle slows all of them and the
ratios stand. Work that waits for other processes is timed by the wall: ``Stopwatch(clock=time.perf_counter)``.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from statistics import median

__all__ = ["Stopwatch", "Timing"]

Work = Callable[[], object]

LEAST_ROUNDS = 3


@dataclass(frozen=True, slots=True)
class Timing:
    """Seconds of one call: the best and the median of ``rounds`` rounds of ``calls`` calls each."""

    best: float
    median: float
    rounds: int
    calls: int


@dataclass(frozen=True, slots=True)
class Stopwatch:
    """How long to look: up to ``rounds`` rounds, each repeated until it lasts ``shortest`` seconds; after ``patience``
    seconds on the wall the rest is left out, three rounds made. ``quick`` tells a benchmark to choose small sizes
    too."""

    rounds: int = 25
    shortest: float = 0.004
    patience: float = 8.0
    quick: bool = False
    clock: Callable[[], float] = time.process_time

    @classmethod
    def brief(cls) -> Stopwatch:
        """One round of one call: only to see that a benchmark runs."""
        return cls(rounds=1, shortest=0.0, quick=True)

    def one(self, work: Work) -> Timing:
        """Time one call."""
        return self.together({"": work})[""]

    def together(self, works: Mapping[str, Work]) -> dict[str, Timing]:
        """Time several calls in turn, the same number of rounds each; every call is made once beforehand to warm up."""
        calls = {name: self._calls(work) for name, work in works.items()}
        seconds: dict[str, list[float]] = {name: [] for name in works}
        begin = time.perf_counter()
        for done in range(self.rounds):
            if done >= LEAST_ROUNDS and time.perf_counter() - begin > self.patience:
                break
            for name, work in works.items():
                seconds[name].append(self._round(work, calls[name]))
        return {name: Timing(min(s), median(s), len(s), calls[name]) for name, s in seconds.items()}

    def _calls(self, work: Work) -> int:
        """Calls per round: enough for the round to outlast the clock's own grain."""
        work()
        once = self._round(work, 1)
        return max(1, math.ceil(self.shortest / max(once, 1e-7)))

    def _round(self, work: Work, calls: int) -> float:
        begin = self.clock()
        for _ in range(calls):
            work()
        return (self.clock() - begin) / calls
