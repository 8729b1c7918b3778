"""Rows evaluated: all that strikes are summed from, ready for any strike within the plan's reach, and cuttable by
slice.

Grids of all rows lie end to end in one buffer, so that strikes of every slice and row are summed by one window pass;
bent rows keep their terms and are summed directly.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from engine.arrays import Floats, Ints
from engine.protocols import Model
from engine.transform.bounds import alias_bounds, truncation_bounds
from engine.transform.deformed import BentSum, bent_sums
from engine.transform.kernels import Kernel
from engine.transform.lines import line_sums
from engine.transform.plan import Plan
from engine.transform.window import MARGIN, grid_length

__all__ = ["Rows", "evaluate"]

_BLOCK_NODES = 1 << 13  # nodes evaluated together: some 20 temporaries of 128 KiB each stay near the cache
HARD_NODES = 4096
_LONGEST = 1 << 17  # nodes of a straight contour where no bend reaches the target: some 30 ms
_MISSED = 8.0  # times its target: the bend is given up
_MERGE = 1.6  # rows are given up to this many times the nodes they need when that saves a block of their own


@dataclass(frozen=True, slots=True)
class Rows:
    """Rows of S slices, R in all, for K kernels. ``offset`` and ``length`` (R,) locate a row's grid in ``grid`` (K,
    total); bent rows have length 0. ``base``, ``last`` (2 S,) and ``cuts`` (2 S, C) as in the plan."""

    exponent: Floats
    period: Floats
    nodes: Ints
    first: Ints  # first row of each slice, and R at the end: (S + 1,)
    base: Ints
    cuts: Floats
    last: Floats
    offset: Ints
    length: Ints
    grid: Floats
    log_scale: Floats
    rounding: Floats
    slope: Floats
    pieces: Floats
    aliases: Floats  # (4, K, R): ``flat``, ``growing`` and their caps, of ``Kernel.exact_aliases``
    middle: Any  # (R,): exponents inside (0, 1)
    counted: int  # nodes, as counted against a limit
    bent: dict[int, list[BentSum]] = field(default_factory=dict)

    @property
    def stored(self) -> int:
        """Numbers held in the grids and terms: what a cache counts."""
        return int(
            self.grid.size + sum(2 * part.psi.size + 2 * part.iz.size for parts in self.bent.values() for part in parts)
        )


def evaluate(model: Model, tau: Floats, plan: Plan, kernels: list[Kernel]) -> Rows:
    """All rows of a plan. ``model`` stacked over the S slices, ``tau`` (S, 1)."""
    count, kinds = plan.nodes.shape[0], len(kernels)
    bent = _bent(model, tau, plan, kernels)
    nodes, blocks = _blocks(plan, _straightened(plan, bent))
    length = np.where(nodes > 0, np.array([grid_length(int(n)) for n in nodes]), 0)
    room = np.where(nodes > 0, length + 2 * MARGIN, 0)
    offset = np.concatenate([[0], np.cumsum(room)])
    grid = np.empty((kinds, int(offset[-1])))
    log_scale = np.zeros(count)
    rounding, slope, pieces, last = (np.zeros((kinds, count)) for _ in range(4))
    for rows in blocks:
        found = line_sums(
            model.take(plan.slice_of[rows]), tau[plan.slice_of[rows]], plan, rows, kernels, nodes=int(nodes[rows[0]])
        )
        log_scale[rows], rounding[:, rows], slope[:, rows] = found.log_scale, found.rounding, found.slope
        last[:, rows] = found.last
        for i, r in enumerate(rows):
            grid[:, offset[r] : offset[r] + room[r]] = found.grid[:, i]
    straight = np.flatnonzero(nodes > 0)
    if straight.shape[0]:
        owner = plan.slice_of[straight]
        sub, sub_tau, scale = model.take(owner), tau[owner], log_scale[straight]
        end = 2.0 * np.pi / plan.period[straight] * (nodes[straight] - 1)
        pieces[:, straight] = alias_bounds(sub, sub_tau, plan, straight, kernels, scale) + truncation_bounds(
            sub, sub_tau, plan.exponent[straight], end, kernels, last[:, straight], scale
        )
    for r, parts in bent.items():
        nodes[r] = sum(part.iz.shape[0] for part in parts)
    slices = plan.base.shape[0] // 2
    first = np.searchsorted(plan.slice_of, np.arange(slices + 1))
    return Rows(
        plan.exponent, plan.period, nodes, first, plan.base, plan.cuts, plan.last, offset[:-1], length, grid, log_scale,
        rounding, slope, pieces, _aliases(plan, length, kernels), (plan.exponent > 0.0) & (plan.exponent < 1.0),
        counted_nodes(nodes, length), bent,
    )  # fmt: skip


def _aliases(plan: Plan, length: Ints, kernels: list[Kernel]) -> Floats:
    """Closed-form aliases of every kernel and row; bent rows have none."""
    out = np.empty((4, len(kernels), length.shape[0]))
    for i, kernel in enumerate(kernels):
        out[:, i] = kernel.exact_aliases(plan.exponent, plan.period)
    out[:, :, length == 0] = 0.0
    return out


def counted_nodes(nodes: Ints, length: Ints) -> int:
    """What rows count against the node limit: their nodes, and a lump for a bent one's probes and sum."""
    return int(np.where(length > 0, nodes, HARD_NODES).sum())


def _bent(model: Model, tau: Floats, plan: Plan, kernels: list[Kernel]) -> dict[int, list[BentSum]]:
    """The rows left to the deformed contour."""
    out: dict[int, list[BentSum]] = {}
    for r in np.flatnonzero(plan.nodes == 0).tolist():
        one = plan.slice_of[r : r + 1]
        out[r] = bent_sums(model.take(one), float(tau[one[0], 0]), plan, r, kernels)
    return out


def _straightened(plan: Plan, bent: dict[int, list[BentSum]]) -> Ints:
    """Nodes per row after rows whose bends all miss their target are taken back to long straight contours; those leave
    ``bent``."""
    nodes = plan.nodes.copy()
    for r in list(bent):
        target = plan.log_target[r] - np.array([part.log_scale for part in bent[r]])
        missed = np.array([part.pieces[0] for part in bent[r]]) > _MISSED * np.exp(target)
        lost = not all(np.isfinite(part.pieces).all() for part in bent[r])
        if (missed.any() or lost) and np.isfinite(plan.wanted[r]):
            nodes[r] = min(1 << int(np.ceil(np.log2(plan.wanted[r]))), _LONGEST)
            del bent[r]
    return nodes


def _blocks(plan: Plan, wanted: Ints) -> tuple[Ints, list[Ints]]:
    """Nodes given to each row (rows of a slice share a count where that is cheap), and row numbers grouped by them,
    at most ``_BLOCK_NODES`` nodes a group."""
    most = np.zeros(plan.base.shape[0], dtype=np.int64)
    np.maximum.at(most, plan.slice_of, wanted)
    largest = most[plan.slice_of]
    nodes = np.where((wanted > 0) & (_MERGE * wanted >= largest), largest, wanted)
    out: list[Ints] = []
    for size in np.unique(nodes):
        if size > 0:
            rows = np.flatnonzero(nodes == size)
            step = max(1, _BLOCK_NODES // int(size))
            out.extend(rows[i : i + step] for i in range(0, rows.shape[0], step))
    return nodes, out


def cut(rows: Rows, s: int) -> Rows:
    """Slice ``s`` alone."""
    a, b = int(rows.first[s]), int(rows.first[s + 1])
    lo = int(rows.offset[a]) if b > a else 0
    hi = int(rows.offset[b]) if b < rows.offset.shape[0] else rows.grid.shape[1]
    side = np.array([s, s + rows.base.shape[0] // 2])
    return Rows(
        rows.exponent[a:b], rows.period[a:b], rows.nodes[a:b], np.array([0, b - a]), rows.base[side] - a,
        rows.cuts[side], rows.last[side], rows.offset[a:b] - lo, rows.length[a:b], rows.grid[:, lo:hi].copy(),
        rows.log_scale[a:b], rows.rounding[:, a:b], rows.slope[:, a:b], rows.pieces[:, a:b],
        rows.aliases[:, :, a:b], rows.middle[a:b], counted_nodes(rows.nodes[a:b], rows.length[a:b]),
        {r - a: parts for r, parts in rows.bent.items() if a <= r < b},
    )  # fmt: skip


def join(parts: list[Rows]) -> Rows:
    """Slices cut apart, side by side again."""
    if len(parts) == 1:
        return parts[0]
    counts = np.cumsum([0] + [part.exponent.shape[0] for part in parts])
    sizes = np.cumsum([0] + [part.grid.shape[1] for part in parts])
    most = max(part.cuts.shape[1] for part in parts)
    cuts = np.full((2, len(parts), most), -np.inf)
    for i, part in enumerate(parts):
        cuts[:, i, : part.cuts.shape[1]] = part.cuts
    return Rows(
        np.concatenate([part.exponent for part in parts]),
        np.concatenate([part.period for part in parts]),
        np.concatenate([part.nodes for part in parts]),
        counts,
        np.array([[part.base[side] + counts[i] for i, part in enumerate(parts)] for side in (0, 1)]).ravel(),
        cuts.reshape(2 * len(parts), most),
        np.concatenate([[part.last[side] for part in parts] for side in (0, 1)]),
        np.concatenate([part.offset + sizes[i] for i, part in enumerate(parts)]),
        np.concatenate([part.length for part in parts]),
        np.concatenate([part.grid for part in parts], axis=1),
        np.concatenate([part.log_scale for part in parts]),
        np.concatenate([part.rounding for part in parts], axis=1),
        np.concatenate([part.slope for part in parts], axis=1),
        np.concatenate([part.pieces for part in parts], axis=1),
        np.concatenate([part.aliases for part in parts], axis=2),
        np.concatenate([part.middle for part in parts]),
        sum(part.counted for part in parts),
        {r + int(counts[i]): bent for i, part in enumerate(parts) for r, bent in part.bent.items()},
    )
