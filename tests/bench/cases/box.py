"""The cost of slices drawn over the whole parameter box of Heston: no input is dear."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from engine import price_smiles
from engine.models.heston import Heston
from engine.slices import Slice
from engine.status import Status
from engine.transform import plan_cache
from tests.bench.inputs import TOLERANCE, drawn, smile
from tests.bench.table import Table, count, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "the dearest of 2,000 slices over the whole parameter box"
STRIKES = 101
AGAIN = 24  # the dearest at first sight are timed again, by the best of several calls, as is a sample around the median


def tables(watch: Stopwatch) -> Iterable[Table]:
    """Quantiles of the cost of one slice priced from nothing, and what the dearest are like."""
    models, expiries = drawn(12 if watch.quick else 2000, seed=20261205)
    slices = [smile(model, expiry, STRIKES) for model, expiry in zip(models, expiries, strict=True)]
    first = np.array([_cost(watch, model, one, 1) for model, one in zip(models, slices, strict=True)])
    order = np.argsort(first)
    cost = first.copy()
    for i in order[-AGAIN:] if not watch.quick else []:
        cost[i] = _cost(watch, models[i], slices[i], 5)
    order = np.argsort(cost)
    middle = order[order.shape[0] // 2 - 12 : order.shape[0] // 2 + 12]
    median = float(np.median([_cost(watch, models[i], slices[i], 1 if watch.quick else 5) for i in middle]))
    methods = [price_smiles(m, [s], tolerance=TOLERANCE)[0] for m, s in zip(models, slices, strict=True)]
    yield _quantiles(cost, median, methods)
    yield _dearest(order[::-1][:5].tolist(), cost, median, models, expiries, methods)


def _cost(watch: Stopwatch, model: Heston, one: Slice, calls: int) -> float:
    best = float("inf")
    for _ in range(calls):
        plan_cache.clear()
        begin = watch.clock()
        price_smiles(model, [one], tolerance=TOLERANCE)
        best = min(best, watch.clock() - begin)
    return best


def _quantiles(cost: np.ndarray, median: float, found: list) -> Table:
    met = np.concatenate([one.statuses for one in found]) != int(Status.TOLERANCE_NOT_MET)
    bounds = np.concatenate([one.error_bounds / np.maximum(one.prices, 1e-290) for one in found])
    table = Table(
        f"{count(len(found))} slices x {STRIKES} strikes, one hour to fifty years, tolerance {TOLERANCE:g}",
        ("cost", "time", "of median", "goal"),
        notes=[
            f"one slice a call, from nothing, with implied volatilities; the {AGAIN} dearest: best of 5 calls",
            f"relative error bounds: median {np.median(bounds):.1e}; tolerance met at {100.0 * met.mean():.2f} % of "
            "strikes (the others say so)",
        ],
    )
    for name, share in (("cheapest", 0.0), ("median", 0.5), ("90 %", 0.9), ("99 %", 0.99), ("dearest", 1.0)):
        spent = median if name == "median" else float(np.quantile(cost, share))
        table.add(name, seconds(spent), ratio(spent, median), "<= 20 x" if name == "dearest" else "")
    return table


def _dearest(
    at: list[int], cost: np.ndarray, median: float, models: list[Heston], expiries: list[float], found: list
) -> Table:
    table = Table("The dearest", ("v0, kappa, theta, sigma, rho", "expiry", "method", "rows", "nodes", "of median"))
    for i in at:
        how = found[i].transform
        table.add(
            ", ".join(f"{value:.3g}" for value in models[i].row(0)),
            f"{expiries[i]:.3g}",
            how.method,
            str(len(how.exponents)),
            count(how.nodes),
            ratio(float(cost[i]), median),
        )
    return table
