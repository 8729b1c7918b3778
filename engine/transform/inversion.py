"""The transform's face: a batch of slices in, out-of-the-money values with bounds out.

Rows are planned for the whole batch, grouped by node count, and evaluated in blocks that stay in cache; hard rows go
through the deformed contour one by one. Every row's raw value is turned into the out-of-the-money vanilla value
(call for ``k >= 0``, put for ``k < 0``) per unit forward and, on request, the out-of-the-money digital probability.
Values are projected onto ``[0, min(1, e^k)]`` (vanilla) or ``[0, 1]`` (digital): the truth lies there, so the projection
never increases the error.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats, Ints
from engine.errors import RefusedError
from engine.protocols import Model
from engine.transform.contours import Contours, select
from engine.transform.deformed import deformed_row
from engine.transform.kernels import DIGITAL, VANILLA, Kernel
from engine.transform.plain import plain_rows
from engine.transform.plan import Plan, Strikes, plan_rows
from engine.transform.record import EPS, RowValues

__all__ = ["Inversion", "invert"]

_BLOCK_NODES = 1 << 14  # nodes evaluated together: some 20 temporaries of 128 KiB each stay near the cache
_HARD_NODES = 4096  # what a hard row is counted as against the node limit: its probes and its sum


@dataclass(frozen=True, slots=True)
class Inversion:
    """``vanilla`` and, if asked, ``digital``: values and bounds per strike (n,); rows of the plan and nodes per row."""

    vanilla: RowValues
    digital: RowValues | None
    plan: Plan
    nodes: Ints


def invert(model: Model, tau: Floats, strikes: Strikes, *, tolerance: float, digital: bool = False, limit: int = 1 << 40) -> Inversion:
    """Out-of-the-money values of a batch.

    ``model`` stacked over S slices, ``tau`` (S, 1) years, ``strikes`` ragged; ``tolerance`` relative to each value.
    The bound covers the error for every input in the models' parameter boxes; where double precision cannot hold
    the tolerance the bound says so. Raises RefusedError when the plan needs more than ``limit`` nodes.
    """
    plan = plan_rows(model, tau, strikes, tolerance=tolerance, digital=digital)
    wanted = int(np.sum(np.where(plan.nodes > 0, plan.nodes, _HARD_NODES)))
    if wanted > limit:
        raise RefusedError("slices", f"would need about {wanted} transform nodes", allowed=f"at most {limit}")
    kernels = [VANILLA, DIGITAL] if digital else [VANILLA]
    growth = np.exp(strikes.k)
    n = strikes.k.shape[0]
    raw = [RowValues(np.zeros(n), np.zeros(n)) for _ in kernels]
    nodes = plan.nodes.copy()
    by_row = np.argsort(plan.row_of, kind="stable")
    ends = np.searchsorted(plan.row_of[by_row], np.arange(plan.nodes.shape[0] + 1))
    row_model = model.take(plan.slice_of)
    row_tau = tau[plan.slice_of]
    for rows in _blocks(plan):
        contours = select(plan, rows)
        points = np.concatenate([by_row[ends[r] : ends[r + 1]] for r in rows])
        local = np.repeat(np.arange(rows.shape[0]), ends[rows + 1] - ends[rows])
        block = row_model.take(rows)
        if contours.nodes[0] > 0:
            found = plain_rows(
                block, row_tau[rows], contours, kernels, row=local, k=strikes.k[points], growth=growth[points]
            )
        else:
            found, nodes[rows[0]] = _hard(block, row_tau[rows], contours, kernels, strikes.k[points])
        for target, part in zip(raw, found, strict=True):
            target.value[points] = part.value
            target.bound[points] = part.bound
    exponent = plan.exponent[plan.row_of]
    vanilla = _vanilla(raw[0], exponent, strikes.k, growth)
    return Inversion(vanilla, _digital(raw[1], exponent, strikes.k) if digital else None, plan, nodes)


def _blocks(plan: Plan) -> list[Ints]:
    """Row numbers grouped by node count, at most ``_BLOCK_NODES`` nodes a group; hard rows alone."""
    order = np.argsort(plan.nodes, kind="stable")
    counts = plan.nodes[order]
    out: list[Ints] = []
    for size in np.unique(counts):
        rows = order[counts == size]
        step = 1 if size == 0 else max(1, _BLOCK_NODES // int(size))
        out.extend(rows[i : i + step] for i in range(0, rows.shape[0], step))
    return out


def _hard(
    model: Model, tau: Floats, contours: Contours, kernels: list[Kernel], k: Floats
) -> tuple[list[RowValues], int]:
    found = deformed_row(model, float(tau[0, 0]), contours, 0, kernels, k=k)
    return found.values, found.nodes


def _vanilla(raw: RowValues, exponent: Floats, k: Floats, growth: Floats) -> RowValues:
    """Raw values to out-of-the-money values: direct outside [0, 1], by parity with ``-E[min]`` inside."""
    inside = (exponent > 0.0) & (exponent < 1.0)
    most = np.minimum(1.0, growth)
    value = np.where(inside, raw.value + most, raw.value)
    bound = raw.bound + np.where(inside, 2.0 * EPS * most, 0.0)
    return RowValues(np.clip(value, 0.0, most), bound)


def _digital(raw: RowValues, exponent: Floats, k: Floats) -> RowValues:
    """Raw values to out-of-the-money probabilities: ``P(X > k)`` for ``k >= 0``, ``P(X < k)`` for ``k < 0``."""
    call = k >= 0.0
    above = exponent > 0.0
    value = np.where(call, np.where(above, raw.value, 1.0 + raw.value), np.where(above, 1.0 - raw.value, -raw.value))
    bound = raw.bound + np.where(call == above, 0.0, 2.0 * EPS)
    return RowValues(np.clip(value, 0.0, 1.0), bound)
