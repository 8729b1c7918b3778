"""A thousand slices of a hundred strikes in one call: options a second, the direct sum, memory."""

from __future__ import annotations

import tracemalloc
from collections.abc import Callable, Iterable

import numpy as np

from engine import price_smiles
from engine.models.heston import Heston
from engine.slices import Slice
from engine.transform import plan_cache
from tests.bench.inputs import FORWARD, TOLERANCE, worst_errors
from tests.bench.inputs import smile as slice_of
from tests.bench.rivals import Planned, planned
from tests.bench.table import Table, count, error, ratio, seconds
from tests.bench.timing import Stopwatch
from tests.reference.mp_models import reference_model
from tests.reference.mp_prices import otm_values

TITLE = "1,000 slices x 100 strikes in one call"
STRIKES = 100
DIRECT = 12  # slices the direct sum is timed on, evenly spread; its time is scaled
CHECKED = 10  # slices of which some strikes each are held against 20 digits
AT = [0, 33, 66, 99]
_NAMES = ("v0", "kappa", "theta", "sigma", "rho")


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Every slice has parameters and an expiry of its own; errors against 20 digits."""
    slices_wanted = 24 if watch.quick else 1000
    models, slices = _drawn(slices_wanted)

    def cold(vols: bool) -> np.ndarray:
        plan_cache.clear()
        found = price_smiles(models, slices, tolerance=TOLERANCE, implied_vols=vols)
        return np.concatenate([one.prices for one in found])

    plan = planned(models, slices, tolerance=TOLERANCE)
    bent = int((plan.rows.length == 0).sum())
    straight = [
        i for i in range(slices_wanted) if (plan.rows.length[plan.rows.first[i] : plan.rows.first[i + 1]] > 0).all()
    ]
    few = [straight[i] for i in np.linspace(0, len(straight) - 1, 2 if watch.quick else DIRECT).astype(int)]
    times = watch.together(
        {
            "engine": lambda: cold(False),
            "engine with vols": lambda: cold(True),
            "floor": plan.floor(),
            "direct": lambda: plan.direct(few),
        }
    )
    direct = times["direct"].best * slices_wanted / len(few)
    whole, floor = times["engine"].best, times["floor"].best
    options = slices_wanted * STRIKES
    some = few[:1] if watch.quick else few[:: max(1, len(few) // CHECKED)]
    errors = _errors(cold(False), plan, models, slices, some)
    table = Table(
        f"{count(slices_wanted)} slices x {STRIKES} strikes, a model and an expiry for each, tolerance {TOLERANCE:g}",
        ("", "time", "options a second", "of engine", "goal", "of floor", "memory", "goal", "relative error"),
        notes=[
            f"direct sum: the engine's nodes, characteristic function included, timed on {len(few)} slices, scaled",
            f"memory: peak of what one call takes, by tracemalloc; {bent} bent rows (direct sums in the engine too)",
            f"errors: worst of {len(AT)} strikes of {len(some)} slices against 20 digits",
        ],
    )
    for name, spent, goals, memory, worst in (
        ("engine", whole, ("", "< 1 GiB"), _peak(lambda: cold(False)), error(errors["engine"])),
        ("engine with implied vols", times["engine with vols"].best, ("", "< 1 GiB"), _peak(lambda: cold(True)), ""),
        ("direct sum", direct, (">= 20 x", ""), "", error(errors["direct"])),
        ("floor", floor, ("", ""), "", ""),
    ):
        speed = count(round(options / spent)) if name != "floor" else ""
        table.add(
            name, seconds(spent), speed, ratio(spent, whole), goals[0], ratio(spent, floor), memory, goals[1], worst
        )
    yield table


def _drawn(slices: int) -> tuple[list[Heston], list[Slice]]:
    """Parameters as markets show them (common practice, no source), expiries from a week to five years."""
    rng = np.random.default_rng(20261204)
    low, high = np.array([0.01, 0.5, 0.01, 0.2, -0.9]), np.array([0.09, 6.0, 0.09, 1.0, 0.1])
    models = [Heston(*map(float, row)) for row in low + (high - low) * rng.random((slices, 5))]
    expiries = np.exp(rng.uniform(np.log(7 / 365), np.log(5.0), slices)).tolist()
    return models, [slice_of(m, t, STRIKES, width=4.0) for m, t in zip(models, expiries, strict=True)]


def _peak(work: Callable[[], object]) -> str:
    """What one call takes at most, above what was there before."""
    tracemalloc.start()
    work()
    most = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return f"{most / 2**20:.0f} MiB"


def _exact(models: list[Heston], slices: list[Slice], i: int) -> np.ndarray:
    twin = reference_model("heston", dict(zip(_NAMES, models[i].row(0), strict=True)))
    found = otm_values(twin, slices[i].expiry, FORWARD, slices[i].strikes[AT].tolist(), digits=20)
    return FORWARD * np.array([float(value) for value in found])


def _errors(
    prices: np.ndarray, plan: Planned, models: list[Heston], slices: list[Slice], some: list[int]
) -> dict[str, float]:
    """Worst relative errors of the engine and of the direct sum at the checked strikes of some slices."""
    worst = {"engine": 0.0, "direct": 0.0}
    for i in some:
        exact = _exact(models, slices, i)
        own = {"engine": prices[STRIKES * i : STRIKES * (i + 1)], "direct": FORWARD * plan.direct([i])}
        for name, found in own.items():
            worst[name] = max(worst[name], worst_errors(found[AT], exact)[0])
    return worst
