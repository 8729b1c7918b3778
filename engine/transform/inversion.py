"""The transform's face: a batch of slices in, out-of-the-money values with bounds out.

A batch goes through in chunks of slices: plan, rows, strikes. Every row's raw value is turned into the value of the
out-of-the-money side (calls for ``k >= 0``, puts for ``k < 0``) per unit forward. Vanillas and digitals are projected
onto the interval where the truth lies, ``[0, min(1, e^k)]`` and ``[0, 1]``, which never increases the error. Where a
bound misses the tolerance (the plan's estimates of the values were too high), the slice is planned once more, tighter
by what was missing, and the better of both is kept.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import EPS, Floats, Ints
from engine.errors import RefusedError
from engine.protocols import Model
from engine.transform import plan_cache
from engine.transform.kernels import Kernel
from engine.transform.moments import NOTHING
from engine.transform.plan import plan_rows
from engine.transform.reach import Strikes, reach_of
from engine.transform.record import RowValues, assemble
from engine.transform.rows import Rows, counted_nodes, evaluate
from engine.transform.window import sums_at

__all__ = ["Contour", "Inversion", "invert"]

_CHUNK = 256  # slices planned and evaluated together: the plan's calls are spread thin, the grids stay near the cache
_NOTHING = float(np.exp(NOTHING))
_MOST_APART = 8  # missed strikes that are then planned one by one
_TIGHTEST = 2.0**-16  # of the tolerance, for the second plan


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

    ``model`` stacked over S slices, ``tau`` (S, 1) years, ``strikes`` ragged; ``tolerance`` relative to each vanilla
    value. The bound covers the error for every input in the models' parameter boxes; where double precision cannot hold
    the tolerance the bound says so. Raises RefusedError when the plans need more than ``limit`` nodes.
    """
    n = strikes.k.shape[0]
    work = _Work(tolerance, kernels, limit, limit, np.empty((len(kernels), n)), np.empty((len(kernels), n)))
    contours: list[Contour] = []
    count = tau.shape[0]
    with np.errstate(over="ignore", under="ignore", invalid="ignore", divide="ignore"):  # a bound says what was lost
        for start in range(0, count, _CHUNK):
            stop = min(start + _CHUNK, count)
            lo = int(strikes.starts[start])
            hi = int(strikes.starts[stop]) if stop < count else n
            part = Strikes(strikes.k[lo:hi], strikes.slice_of[lo:hi] - start, strikes.starts[start:stop] - lo)
            sub = model.take(np.arange(start, stop)) if count > _CHUNK else model
            rows = _prepared(work, sub, tau[start:stop], part, tolerance)
            work.value[:, lo:hi], work.bound[:, lo:hi] = _at_strikes(rows, part, kernels)
            contours.extend(_contours(rows))
            _repair(work, sub, tau[start:stop], part, lo)
    return Inversion(work.value, work.bound, contours)


@dataclass(slots=True)
class _Work:
    """One call: what was asked, the nodes left of the limit, and the answers (K, n) as they come to stand."""

    tolerance: float
    kernels: list[Kernel]
    limit: int
    left: int
    value: Floats
    bound: Floats

    def missed(self, part: slice) -> Ints:
        """Positions in ``part`` whose bound misses the tolerance and is not nothing."""
        own = self.bound[0, part]
        return np.flatnonzero((own > self.tolerance * self.value[0, part]) & (own > 1e-290))


def _repair(work: _Work, model: Model, tau: Floats, strikes: Strikes, lo: int) -> None:
    """Slice by slice, so that a slice's answer does not depend on its neighbours: plan the missed strikes together,
    then those that this has helped and that still miss one by one."""
    everything = work.missed(slice(lo, lo + strikes.k.shape[0]))
    for member in np.unique(strikes.slice_of[everything]):
        own = everything[strikes.slice_of[everything] == member]
        before = work.bound[0, lo + own].copy()
        _improve(work, model, tau, strikes, own, lo, apart=False)
        after = work.bound[0, lo + own]
        helped = (after <= 0.5 * before) & (after > work.tolerance * work.value[0, lo + own])
        if 0 < np.count_nonzero(helped) <= _MOST_APART:
            _improve(work, model, tau, strikes, own[helped], lo, apart=True)


def _improve(work: _Work, model: Model, tau: Floats, strikes: Strikes, missed: Ints, lo: int, *, apart: bool) -> None:
    """Plan the missed strikes of one slice, or each of them by itself, for the tolerance that would have been met;
    keep the better."""
    at = lo + missed
    short = float(np.min(work.value[0, at] / work.bound[0, at])) * work.tolerance
    tighter = work.tolerance * float(np.exp2(np.floor(np.log2(np.clip(short, _TIGHTEST, 0.5)))))
    owner = strikes.slice_of[missed]
    members, slice_of = (owner, np.arange(missed.shape[0])) if apart else (owner[:1], np.zeros_like(owner))
    again = Strikes(strikes.k[missed], slice_of, np.searchsorted(slice_of, np.arange(members.shape[0])))
    rows = _prepared(work, model.take(members), tau[members], again, tighter, rounded=False)
    new_value, new_bound = _at_strikes(rows, again, work.kernels)
    better = new_bound < work.bound[:, at]
    work.value[:, at] = np.where(better, new_value, work.value[:, at])
    work.bound[:, at] = np.where(better, new_bound, work.bound[:, at])


def _prepared(
    work: _Work, model: Model, tau: Floats, strikes: Strikes, tolerance: float, *, rounded: bool = True
) -> Rows:
    """Rows of a chunk, from the cache where all inputs are the same; counted against the node limit."""
    reach = reach_of(strikes, np.sqrt(model.mean_variance(tau)).reshape(-1), rounded=rounded)
    power = min(kernel.power for kernel in work.kernels)

    def fresh(members: Ints | None) -> Rows:
        sub, sub_tau, sub_reach = model, tau, reach
        if members is not None:
            sub, sub_tau, sub_reach = model.take(members), tau[members], reach.take(members)
        plan = plan_rows(sub, sub_tau, sub_reach, tolerance=tolerance, power=power)
        wanted = counted_nodes(plan.nodes, plan.nodes)
        if wanted > work.left:
            need = work.limit - work.left + wanted
            raise RefusedError("slices", f"would need {need} transform nodes or more", allowed=f"at most {work.limit}")
        return evaluate(sub, sub_tau, plan, work.kernels)

    rows = plan_cache.rows_of(model, tau, reach, (tolerance, tuple(work.kernels)), fresh)
    work.left -= rows.counted
    return rows


def _contours(rows: Rows) -> list[Contour]:
    ends = rows.first
    return [
        Contour(rows.exponent[a:b], rows.nodes[a:b], rows.length[a:b] == 0)
        for a, b in zip(ends[:-1], ends[1:], strict=True)
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
    for i, kernel in enumerate(kernels):
        flat, growing, flat_cap, growing_cap = rows.aliases[:, i, row]
        aliases = flat + growth * growing
        alias_size = flat_cap + growth * growing_cap * (1.0 + np.abs(k))
        raw = assemble(
            total=totals[i],
            log_scale=log_scale,
            rounding=rounding[i],
            slope=slope[i],
            pieces=pieces[i],
            k=k,
            shifted=(kernel.shift - exponent) * k,
            aliases=aliases,
            alias_size=alias_size,
        )
        found = out_of_the_money(kernel, raw, exponent, k, growth, rows.middle[row])
        value[i], bound[i] = found.value, found.bound
    beyond = np.abs(k) > rows.last[side]
    if beyond.any():
        for i, kernel in enumerate(kernels):
            if kernel.markov:
                value[i, beyond], bound[i, beyond] = 0.0, _NOTHING
    return value, bound


def out_of_the_money(
    kernel: Kernel, raw: RowValues, exponent: Floats, k: Floats, growth: Floats, middle: Any
) -> RowValues:
    """Raw values to those of the out-of-the-money side: direct or by the complement where the row is on the other
    one."""
    if not kernel.markov:
        lost = np.isnan(raw.value) | np.isnan(raw.bound)
        return RowValues(np.where(lost, 0.0, raw.value), np.where(lost, np.inf, raw.bound)) if lost.any() else raw
    if kernel.order == 2:
        most = np.minimum(1.0, growth)
        other = middle * most  # a row between the poles gives the value less this
        value, bound = raw.value + other, raw.bound + 2.0 * EPS * other
    else:  # the raw value is P(X > k), else -P(X < k), under the measure of the shift
        most = np.ones_like(k)
        above = exponent > kernel.shift
        complement = above != (k >= 0.0)
        size = np.where(above, raw.value, -raw.value)
        value = np.where(complement, 1.0 - size, size)
        bound = raw.bound + 2.0 * EPS * complement
    lost = ~(bound <= most) | np.isnan(value)  # nothing but the interval is known
    if lost.any():
        value, bound = np.where(np.isnan(value), 0.0, value), np.where(lost, most, bound)
    return RowValues(np.minimum(np.maximum(value, 0.0), most), bound)
