"""Rows of a plan that are evaluated together."""

from __future__ import annotations

from dataclasses import dataclass

from engine.arrays import Floats, Ints
from engine.transform.moments import SideMoments
from engine.transform.plan import Plan

__all__ = ["Contours", "select"]


@dataclass(frozen=True, slots=True)
class Contours:
    """Some rows of a plan, shape (rows,) each; ``moments`` stay per side of the whole batch."""

    slice_of: Ints
    exponent: Floats
    period: Floats
    nodes: Ints
    log_target: Floats
    k_low: Floats
    k_high: Floats
    moments: SideMoments


def select(plan: Plan, rows: Ints) -> Contours:
    """The given rows of the plan."""
    return Contours(
        plan.slice_of[rows],
        plan.exponent[rows],
        plan.period[rows],
        plan.nodes[rows],
        plan.log_target[rows],
        plan.k_low[rows],
        plan.k_high[rows],
        plan.moments,
    )
