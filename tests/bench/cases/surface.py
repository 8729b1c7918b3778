"""A surface of twelve expiries against one expiry, and against its own floor."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from engine import price_smiles
from engine.transform import plan_cache
from tests.bench.inputs import FORWARD, TOLERANCE, fang_oosterlee, reference, smile, worst_errors
from tests.bench.rivals import planned
from tests.bench.table import Table, error, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "a surface of 12 expiries x 101 strikes"
EXPIRIES = (7 / 365, 14 / 365, 1 / 12, 2 / 12, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
CHECKED = 5  # strikes of every expiry held against 20 digits


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Time of the surface from nothing and with its plan known, against one expiry and against its floor."""
    model = fang_oosterlee()
    slices = [smile(model, expiry, 101) for expiry in EXPIRIES]
    year = [smile(model, 1.0, 101)]
    plan = planned([model] * len(slices), slices, tolerance=TOLERANCE)
    year_plan = planned([model], year, tolerance=TOLERANCE)

    def cold(some: list) -> np.ndarray:
        plan_cache.clear()
        found = price_smiles(model, some, tolerance=TOLERANCE, implied_vols=False)
        return np.concatenate([one.prices for one in found])

    works = {
        "surface, from nothing": lambda: cold(slices),
        "surface, plan known": lambda: FORWARD * plan.evaluated(),
        "floor of the surface": plan.floor(),
        "one year, from nothing": lambda: cold(year),
        "one year, plan known": lambda: FORWARD * year_plan.evaluated(),
        "floor of one year": year_plan.floor(),
    }
    times = {name: timing.best for name, timing in watch.together(works).items()}
    each = np.linspace(0, 100, 2 if watch.quick else CHECKED).astype(int)
    checked = slices[::6] if watch.quick else slices
    at = np.concatenate([101 * slices.index(one) + each for one in checked])
    exact = np.concatenate([reference(one, each.tolist()) for one in checked])
    table = Table(
        f"+-5 standard deviations each, a week to five years, tolerance {TOLERANCE:g}, without implied volatilities",
        ("", "time", "of one year", "goal", "of its floor", "goal", "relative error", "absolute error"),
        notes=[
            f"floor: characteristic function at the {plan.rows.nodes.sum():,} nodes used and an FFT for each row",
            f"errors: worst of {CHECKED} strikes of every expiry against 20 digits, absolute ones per unit forward",
        ],
    )
    for kind in ("from nothing", "plan known"):
        for whole, floor in (("surface", "floor of the surface"), ("one year", "floor of one year")):
            name = f"{whole}, {kind}"
            surface = whole == "surface"
            errors = worst_errors(works[name]()[at], exact) if surface else (float("nan"),) * 2
            table.add(
                name,
                seconds(times[name]),
                ratio(times[name], times[f"one year, {kind}"]),
                "<= 6 x" if surface else "",
                ratio(times[name], times[floor]),
                "<= 1.5 x" if surface else "<= 3 x",
                *map(error, errors),
            )
    yield table
