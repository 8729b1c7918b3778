"""How the cost of one smile grows with its strikes: a thousand against a hundred."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from engine import price_smiles
from engine.transform import plan_cache
from tests.bench.inputs import TOLERANCE, fang_oosterlee, reference, smile, worst_errors
from tests.bench.table import Table, count, error, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "one smile of 1,000 strikes against 100"
SIZES = (100, 1000, 10_000)
CHECKED = 25  # strikes held against 20 digits, evenly spread


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Time of each size from nothing, its ratio to the first size, and errors against 20 digits."""
    model = fang_oosterlee()
    slices = {n: smile(model, 1.0, n) for n in (SIZES[:2] if watch.quick else SIZES)}

    def cold(n: int) -> np.ndarray:
        plan_cache.clear()
        return price_smiles(model, [slices[n]], tolerance=TOLERANCE, implied_vols=False)[0].prices

    times = watch.together({str(n): lambda n=n: cold(n) for n in slices})
    table = Table(
        f"One year, +-5 standard deviations, tolerance {TOLERANCE:g}, from nothing, without implied volatilities",
        ("strikes", "time", "of 100 strikes", "goal", "per strike", "relative error", "absolute error"),
        notes=[f"errors: worst of {CHECKED} strikes against 20 digits, absolute ones per unit forward"],
    )
    for n, one in slices.items():
        at = np.linspace(0, n - 1, 3 if watch.quick else CHECKED).astype(int).tolist()
        relative, absolute = worst_errors(cold(n)[at], reference(one, at))
        spent = times[str(n)].best
        goal = "<= 2 x" if n == 1000 else ""
        table.add(
            count(n),
            seconds(spent),
            ratio(spent, times["100"].best),
            goal,
            seconds(spent / n),
            error(relative),
            error(absolute),
        )
    yield table
