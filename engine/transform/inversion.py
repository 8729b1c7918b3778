"""The transform's face: a batch of slices in, out-of-the-money values with bounds out.

A batch goes through in chunks of slices: plan, rows, strikes. Every row's raw value is turned into the value of the
out-of-the-money side (calls for ``k >= 0``, puts for ``k < 0``) per unit forward. Vanillas and digitals are projected onto the
interval where the truth lies, ``[0, min(1, e^k)]`` and ``[0, 1]``, which never increases the error. Where a bound misses the
tolerance, the slice is planned once more for the rounding that was seen, and the better of both is kept.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Floats, Ints
from engine.errors import RefusedError
from engine.protocols import Model
from engine.transform import plan_cache
from engine.transform.kernels import Kernel
from engine.transform.plan import ROUNDING, Plan, plan_rows
from engine.transform.reach import Strikes, reach_of
from engine.transform.record import EPS, RowValues, assemble
from engine.transform.rows import Rows, evaluate
from engine.transform.window import sums_at

__all__ = ["Contour", "Inversion", "invert"]

_CHUNK = 64  # slices planned and evaluated together: the plan's calls are spread thin, the grids stay near the cache
_HARD_NODES = 4096  # what a bent row is counted as against the node limit: its probes and its sum
_CLOSER = 16.0  # the second plan assumes this many times the rounding of the first


@dataclass(frozen=True, slots=True)
class Contour:
    """How one slice was transformed: exponents, nodes per row, and which rows were bent."""

    exponents: Floats
    nodes: Ints
    bent: Any


@dataclass(frozen=True, slots=True)
class Inversion:
    """Values and bounds of every kernel, (K, n), and how each slice was done."""

    value: Floats
    bound: Floats
    contours: list[Contour]


def invert(
    model: Model, tau: Floats, strikes: Strikes, *, tolerance: float, kernels: list[Kernel], limit: int = 1 << 40
) -> Inversion:
    """Out-of-the-money values of a batch, for each kernel; the first one must be the vanilla.

    ``model`` stacked over S slices, ``tau`` (S, 1) years, ``strikes`` ragged; ``tolerance`` relative to each vanilla value.
    The bound covers the error for every input in the models' parameter boxes; where double precision cannot hold
    the tolerance the bound says so. Raises RefusedError when the plans need more than ``limit`` nodes.
    """
    count = tau.shape[0]
    n = strikes.k.shape[0]
    value, bound = np.empty((len(kernels), n)), np.empty((len(kernels), n))
    contours: list[Contour] = []
    left = limit
    for start in range(0, count, _CHUNK):
        stop = min(start + _CHUNK, count)
        members = np.arange(start, stop)
        lo = int(strikes.starts[start])
        hi = int(strikes.starts[stop]) if stop < count else n
        part = Strikes(strikes.k[lo:hi], strikes.slice_of[lo:hi] - start, strikes.starts[start:stop] - lo)
        sub = model.take(members) if count > _CHUNK else model
        rows, left = _prepared(sub, tau[start:stop], part, tolerance, kernels, ROUNDING, left)
        value[:, lo:hi], bound[:, lo:hi] = _at_strikes(rows, part, kernels)
        contours.extend(_contours(rows))
        missed = (bound[0, lo:hi] > tolerance * value[0, lo:hi]) & (value[0, lo:hi] > 1e-290)
        if np.any(missed):
            left = _improve(sub, tau[start:stop], part, np.flatnonzero(missed), lo, tolerance, kernels, value, bound, left)
    return Inversion(value, bound, contours)


def _improve(
    model: Model, tau: Floats, strikes: Strikes, missed: Ints, lo: int, tolerance: float, kernels: list[Kernel],
    value: Floats, bound: Floats, limit: int,
) -> int:  # fmt: skip
    """Plan the missed strikes closer to their own saddles and keep what is better."""
    members, slice_of = np.unique(strikes.slice_of[missed], return_inverse=True)
    again = Strikes(strikes.k[missed], slice_of, np.searchsorted(slice_of, np.arange(members.shape[0])))
    rows, left = _prepared(model.take(members), tau[members], again, tolerance, kernels, _CLOSER * ROUNDING, limit)
    new_value, new_bound = _at_strikes(rows, again, kernels)
    at = lo + missed
    better = new_bound < bound[:, at]
    value[:, at] = np.where(better, new_value, value[:, at])
    bound[:, at] = np.where(better, new_bound, bound[:, at])
    return left


def _prepared(
    model: Model, tau: Floats, strikes: Strikes, tolerance: float, kernels: list[Kernel], rounding: float, limit: int
) -> tuple[Rows, int]:
    """Rows of a chunk, from the cache where all inputs are the same, and what is left of the node limit."""
    reach = reach_of(strikes, np.sqrt(model.mean_variance(tau)).reshape(-1))
    power = min(kernel.power for kernel in kernels)

    def fresh(members: Ints | None) -> Rows:
        some = members is not None
        sub, sub_tau, sub_reach = (model.take(members), tau[members], reach.take(members)) if some else (model, tau, reach)
        plan = plan_rows(sub, sub_tau, sub_reach, tolerance=tolerance, power=power, rounding=rounding)
        wanted = _counted(plan)
        if wanted > limit:
            raise RefusedError("slices", f"would need about {wanted} transform nodes", allowed=f"at most {limit}")
        return evaluate(sub, sub_tau, plan, kernels)

    rows = plan_cache.rows_of(model, tau, reach, (tolerance, rounding, tuple(kernels)), fresh)
    return rows, limit - int(np.sum(np.where(rows.length > 0, rows.nodes, _HARD_NODES)))


def _counted(plan: Plan) -> int:
    return int(np.sum(np.where(plan.nodes > 0, plan.nodes, _HARD_NODES)))


def _contours(rows: Rows) -> list[Contour]:
    ends = rows.first
    return [
        Contour(rows.exponent[a:b], rows.nodes[a:b], rows.length[a:b] == 0) for a, b in zip(ends[:-1], ends[1:], strict=True)
    ]


def _at_strikes(rows: Rows, strikes: Strikes, kernels: list[Kernel]) -> tuple[Floats, Floats]:
    """Values and bounds (K, n) at the strikes."""
    k = strikes.k
    side = strikes.side_of
    row = rows.base[side]
    if rows.cuts.shape[1]:
        row = row + (np.abs(k)[:, None] < rows.cuts[side]).sum(axis=1)
    exponent, period = rows.exponent[row], rows.period[row]
    totals = np.empty((len(kernels), k.shape[0]))
    rounding, slope, pieces = rows.rounding[:, row], rows.slope[:, row], rows.pieces[:, row]
    log_scale = rows.log_scale[row]
    if rows.bent:
        straight = np.flatnonzero(rows.length[row] > 0)
        at = row[straight]
        totals[:, straight] = sums_at(rows.grid, rows.offset[at], rows.length[at], -k[straight] / period[straight])
        for r, parts in rows.bent.items():
            for part in parts:
                own = np.flatnonzero((row == r) & part.serves(k))
                totals[:, own] = part.totals(k[own], float(rows.exponent[r]))
                log_scale[own] = part.log_scale
                for target, source in ((rounding, part.rounding), (slope, part.slope), (pieces, part.pieces)):
                    target[:, own] = source[:, None]
    else:
        totals = sums_at(rows.grid, rows.offset[row], rows.length[row], -k / period)
    growth = np.exp(k)
    value, bound = np.empty_like(totals), np.empty_like(totals)
    straight_row = rows.length[row] > 0 if rows.bent else True
    for i, kernel in enumerate(kernels):
        aliases = kernel.exact_aliases(exponent, period, growth)
        raw = assemble(
            total=totals[i],
            log_scale=log_scale,
            rounding=rounding[i],
            slope=slope[i],
            pieces=pieces[i],
            k=k,
            shifted=(kernel.shift - exponent) * k,
            aliases=np.where(straight_row, aliases, 0.0) if rows.bent else aliases,
        )
        found = out_of_the_money(kernel, raw, exponent, k, growth)
        value[i], bound[i] = found.value, found.bound
    return value, bound


def out_of_the_money(kernel: Kernel, raw: RowValues, exponent: Floats, k: Floats, growth: Floats) -> RowValues:
    """Raw values to those of the out-of-the-money side: direct or by the complement where the row is on the other one."""
    if not kernel.markov:
        return raw
    call = k >= 0.0
    if kernel.order == 2:
        inside = (exponent > 0.0) & (exponent < 1.0)
        most = np.minimum(1.0, growth)
        value = np.where(inside, raw.value + most, raw.value)
        return RowValues(np.clip(value, 0.0, most), raw.bound + np.where(inside, 2.0 * EPS * most, 0.0))
    above = exponent > kernel.shift  # the raw value is P(X > k), else -P(X < k), under the measure of the shift
    size = np.where(above, raw.value, -raw.value)
    value = np.where(call == above, size, 1.0 - size)
    return RowValues(np.clip(value, 0.0, 1.0), raw.bound + np.where(call == above, 0.0, 2.0 * EPS))

