"""One expiry, 101 strikes over five standard deviations either way: the engine, its floor and three other ways."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from engine import price_smiles
from engine.transform import plan_cache
from tests.bench.inputs import FORWARD, PARAMETERS, TOLERANCE, fang_oosterlee, reference, smile, worst_errors
from tests.bench.rivals import Planned, damped_fft, planned, quad_prices
from tests.bench.table import Table, error, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "one smile of 101 strikes under Heston"
STRICT = {"epsabs": TOLERANCE, "epsrel": TOLERANCE}
QUAD_STRIKES = 6  # the loop is timed on so many, evenly spread, and scaled


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Time of the whole smile, its ratio to the floor and to the engine from nothing, and errors against 20 digits."""
    strikes = 21 if watch.quick else 101
    model = fang_oosterlee()
    one = smile(model, 1.0, strikes)
    plan = planned([model], [one], tolerance=TOLERANCE)
    few = np.linspace(0, strikes - 1, 2 if watch.quick else QUAD_STRIKES).astype(int).tolist()
    every = list(range(0, strikes, 7 if watch.quick else 1))

    def repeated() -> np.ndarray:
        return price_smiles(model, [one], tolerance=TOLERANCE, implied_vols=False)[0].prices

    def cold() -> np.ndarray:
        plan_cache.clear()
        return repeated()

    works = {
        "engine, from nothing": cold,
        "engine, plan known": lambda: FORWARD * plan.evaluated(),
        "floor: phi at the nodes and an FFT": plan.floor(),
        "direct sum, same nodes": lambda: FORWARD * plan.direct([0]),
        "damped FFT, 4,096 points": lambda: damped_fft(PARAMETERS, one),
        "quad, its own tolerance": lambda: quad_prices(PARAMETERS, one, few),
        "quad, tolerance 1e-10": lambda: quad_prices(PARAMETERS, one, few, **STRICT),
    }
    times = {name: timing.best for name, timing in watch.together(works).items()}
    repeated()
    times["engine, rows kept"] = watch.one(repeated).best
    for name in ("quad, its own tolerance", "quad, tolerance 1e-10"):
        times[name] *= strikes / len(few)
    values = {name: works[name]() for name in works if not name.startswith(("floor", "quad"))}
    values["engine, rows kept"] = repeated()
    exact = dict(zip(every, reference(one, every), strict=True))
    errors = {name: worst_errors(found[every], np.array(list(exact.values()))) for name, found in values.items()}
    at_few = reference(one, few)
    errors["quad, its own tolerance"] = worst_errors(quad_prices(PARAMETERS, one, few), at_few)
    errors["quad, tolerance 1e-10"] = worst_errors(quad_prices(PARAMETERS, one, few, **STRICT), at_few)
    yield _table(times, errors, strikes, _contours(plan), len(few))


def _contours(plan: Planned) -> str:
    rows = plan.rows
    return ", ".join(f"{n} nodes at p = {p:.3g}" for n, p in zip(rows.nodes, rows.exponent, strict=True))


def _table(
    times: dict[str, float], errors: dict[str, tuple[float, float]], strikes: int, contours: str, few: int
) -> Table:
    goals = {
        "engine, from nothing": "<= 3 x floor",
        "engine, plan known": "<= 3 x floor",
        "damped FFT, 4,096 points": ">= 4 x",
        "quad, its own tolerance": ">= 500 x",
        "quad, tolerance 1e-10": ">= 500 x",
    }
    table = Table(
        f"{strikes} strikes over +-5 standard deviations, one year, tolerance {TOLERANCE:g}",
        ("", "time", "of floor", "of the first", "of plan known", "goal", "relative error", "absolute error"),
        notes=[
            "parameters of Fang and Oosterlee 2008; errors: worst against 20 digits, absolute ones per unit forward",
            f"contours: {contours}",
            "from nothing: plan, rows and strikes; plan known: rows and strikes; rows kept: strikes; no implied vols",
            "goals: of the floor for the engine, of the first row for the other ways",
            f"quad: two probabilities (Heston 1993), timed on {few} strikes and scaled; errors at those strikes",
            "damped FFT: Carr and Madan 1999, alpha 1.5, spacing 0.25, Simpson's weights, cubic spline",
        ],
    )
    floor, cold = times["floor: phi at the nodes and an FFT"], times["engine, from nothing"]
    known = times["engine, plan known"]
    for name in sorted(
        times,
        key=lambda name: (not name.startswith("engine"), -times[name] if name.startswith("engine") else times[name]),
    ):
        spent = times[name]
        relative, absolute = errors.get(name, (float("nan"), float("nan")))
        table.add(
            name,
            seconds(spent),
            ratio(spent, floor),
            ratio(spent, cold),
            ratio(spent, known),
            goals.get(name, ""),
            error(relative),
            error(absolute),
        )
    return table
