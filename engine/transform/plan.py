"""From a tolerance to rows: which exponents, which period, how many nodes. Nothing here is chosen by a user.

A *row* is one contour ``z = u - i p`` of one slice and the strikes it serves. The plan picks, for a whole batch at
once,

1. one row at ``p = 1/2`` where every strike of a slice, or of a side, is worth more than rounding can lose; otherwise
rows
   with ``p > 1`` for calls and ``p < 0`` for puts, the fewest for which no strike is more than ``loss`` units in the
   exponent above its own saddle (``loss`` follows from tolerance / rounding);
2. the period ``L`` of each row from Markov bounds on the aliases left after the closed-form correction, minimised over
   moment orders in closed form;
3. the end ``U`` of the sum from the model's proven envelope, and with it the nodes ``N = U L / (2 pi) + 1``, rounded up
   to a ladder so that rows of many slices share an FFT length. Rows that would need more than ``PLAIN_LIMIT`` nodes
   are left to the deformed contour (``nodes = 0``).

Reference: R. Lord and C. Kahl, "Optimal Fourier inversion in semi-analytical option pricing", J. Comput. Finance 10(4),
2007, for the saddle; the coverage rule and the closed-form period are ours.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import EPS, Floats, Ints
from engine.protocols import Model
from engine.transform.moments import SideMoments, side_moments
from engine.transform.reach import Reach

__all__ = ["Plan", "plan_rows"]

PLAIN_LIMIT = 4096
SHARE = 0.02  # of the tolerance, for each of aliasing and truncation: leaves room for a value estimate off by 10
ROUNDING = 200.0  # rounding units a row is assumed to lose at first; the reported bound uses the sums themselves
MOST_ROWS = 16  # per side
_HEAVY = 0.05  # of a unit in the exponent, from the forward to the farthest strike
_EASY = 0.6  # of the loss allowed: within it, cost decides
_LADDER = np.array(sorted({m * 2**e for e in range(1, 16) for m in (8, 12)}))
_STEP = 1.3  # ratio of the search grid for U
_STEPS = 52


@dataclass(frozen=True, slots=True)
class Plan:
    """Rows of a batch of S slices, sorted by slice. Shapes: (R,) per row; (2 S,) and (2 S, C) per side."""

    slice_of: Ints
    exponent: Floats
    period: Floats
    nodes: Ints  # 0: deformed contour
    wanted: Floats  # nodes a straight contour needs, inf where no end of the sum was found
    log_target: Floats  # log of what each error piece may weigh, before the strike factor exp(-(p - 1) k)
    k_low: Floats
    k_high: Floats
    base: Ints  # first row of each side
    cuts: Floats  # strikes with |k| below the j-th cut of their side belong to a later row than base + j
    last: Floats  # farther strikes of each side are worth less than exp(NOTHING)
    moments: SideMoments


@dataclass(frozen=True, slots=True)
class _Cover:
    """Rows by side: the side, its ordinal there, the grid point of the exponent, and the ``|k|`` it serves."""

    side: Ints
    ordinal: Ints
    grid: Ints
    low: Floats
    high: Floats


def plan_rows(model: Model, tau: Floats, reach: Reach, *, tolerance: float, power: int) -> Plan:
    """Plan a batch. ``model`` stacked over slices, ``tau`` (S, 1), relative ``tolerance`` of out-of-the-money values.

    ``power``: the least decay of the kernels wanted.
    """
    count = tau.shape[0]
    moments = side_moments(model, tau, reach)
    used = reach.far >= 0.0
    last = np.where(used, moments.last(reach.near, np.maximum(reach.far, 0.0)), -1.0)
    reach = Reach(reach.near, last)
    sides = np.arange(2 * count)
    log_far = np.where(used, moments.log_value(sides, np.where(used, reach.far, 0.0)), np.inf)
    symmetric = log_far - 0.5 * np.maximum(reach.far, 0.0)  # what stands against the sum at p = 1/2
    room = np.concatenate([moments.high - 1.0, -moments.low])
    heavy = used & (room * reach.far < _HEAVY)  # the tail has not begun to fall: such values are not small
    middle = (symmetric > np.log(ROUNDING * EPS / tolerance)) | ~used | heavy
    single = middle[:count] & middle[count:]
    both = np.concatenate([single, single])
    wing = used & ~middle
    allowed = float(np.clip(np.log(tolerance / (ROUNDING * EPS)), 0.5, 9.0))
    cover = _cover(moments, sides[wing], reach.near[wing], reach.far[wing], allowed)
    cover = _with_middle(cover, sides[used & middle & ~both], reach)
    alone = np.flatnonzero(single)
    slice_of = np.concatenate([alone, cover.side % count])
    order = np.lexsort((cover_key(alone.shape[0], cover), slice_of))
    x = moments.x[cover.side, cover.grid]
    put = cover.side >= count
    of_cover = np.where(cover.grid < 0, 0.5, np.where(put, -x, 1.0 + x))
    exponent = np.concatenate([np.full(alone.shape, 0.5), of_cover])[order]
    low, high = reach.interval()
    k_low = np.concatenate([low[alone], np.where(put, -cover.high, cover.low)])[order]
    k_high = np.concatenate([high[alone], np.where(put, -cover.low, cover.high)])[order]
    slice_of = slice_of[order]
    place = np.argsort(order)
    base = np.zeros(2 * count, dtype=np.int64)
    base[alone] = base[alone + count] = place[: alone.shape[0]]
    first = cover.ordinal == 0
    base[cover.side[first]] = place[alone.shape[0] :][first]
    cuts = np.full((2 * count, int(cover.ordinal.max(initial=0))), -np.inf)
    if cuts.shape[1]:
        later = cover.ordinal > 0
        cuts[cover.side[later], cover.ordinal[later] - 1] = cover.high[later]
    smallest = _smallest_scaled(moments, slice_of, exponent, k_low, k_high, count)
    log_target = smallest + np.log(tolerance * SHARE)
    period = _period(moments, slice_of, exponent, k_low, k_high, log_target, smallest, tolerance, power)
    scale = np.sqrt(model.mean_variance(tau)).reshape(-1)[slice_of]
    cut = _cutoff(model.take(slice_of), tau[slice_of], exponent, scale, log_target, power)
    with np.errstate(invalid="ignore", over="ignore"):
        wanted = cut * period / (2.0 * np.pi) + 2.0
    plain = wanted <= PLAIN_LIMIT
    nodes = np.where(plain, _LADDER[np.searchsorted(_LADDER, np.where(plain, wanted, 1.0))], 0)
    return Plan(slice_of, exponent, period, nodes, wanted, log_target, k_low, k_high, base, cuts, last, moments)


def cover_key(alone: int, cover: _Cover) -> Ints:
    """Sorting key of rows inside a slice: by side, then by ordinal; a single row has key 0."""
    return np.concatenate([np.zeros(alone, dtype=np.int64), cover.side * MOST_ROWS + cover.ordinal])


def _with_middle(cover: _Cover, sides: Ints, reach: Reach) -> _Cover:
    """Sides that a row at ``p = 1/2`` serves while the other side of their slice needs more: ``grid`` is -1."""
    if sides.shape[0] == 0:
        return cover
    zero = np.zeros_like(sides)
    return _Cover(
        np.concatenate([cover.side, sides]),
        np.concatenate([cover.ordinal, zero]),
        np.concatenate([cover.grid, zero - 1]),
        np.concatenate([cover.low, reach.near[sides]]),
        np.concatenate([cover.high, reach.far[sides]]),
    )


def _cover(moments: SideMoments, sides: Ints, near: Floats, far: Floats, allowed: float) -> _Cover:
    """Cover [near, far] of each side with the fewest exponents, from the far end inwards."""
    found: list[_Cover] = []
    todo = np.arange(sides.shape[0])
    far = far.copy()
    for ordinal in range(MOST_ROWS):
        if todo.size == 0:
            break
        side = sides[todo]
        loss_far = moments.loss(side, far[todo])
        worst = np.maximum(loss_far, moments.loss(side, near[todo]))
        easy = worst <= _EASY * allowed  # the smallest exponent that will do: farthest from the edge of the strip
        grid = np.where(easy.any(axis=1), np.argmax(easy, axis=1), np.argmin(worst, axis=1))
        done = worst[np.arange(todo.size), grid] <= allowed
        if ordinal == MOST_ROWS - 1:
            done[:] = True
        low = near[todo]
        if not done.all():
            grid = np.where(done, grid, np.argmax(loss_far <= allowed, axis=1))
            left = ~done
            lowest = _lowest_covered(moments, side[left], grid[left], far[todo[left]], allowed)
            low[left] = np.maximum(lowest, low[left])
        found.append(_Cover(side, np.full(side.shape, ordinal), grid, low, far[todo]))
        todo, low = todo[~done], low[~done]
        far[todo] = low
    if not found:
        none = np.zeros(0, dtype=np.int64)
        return _Cover(none, none, none, np.zeros(0), np.zeros(0))
    return _Cover(
        np.concatenate([c.side for c in found]),
        np.concatenate([c.ordinal for c in found]),
        np.concatenate([c.grid for c in found]),
        np.concatenate([c.low for c in found]),
        np.concatenate([c.high for c in found]),
    )


def _lowest_covered(moments: SideMoments, side: Ints, grid: Ints, far: Floats, allowed: float) -> Floats:
    """The smallest ``kr`` at which the row still loses no more than ``allowed``, on the saddle strikes of the grid."""
    x, j0 = moments.x[side], moments.saddle[side]
    strike = np.gradient(j0, axis=1) / np.gradient(x, axis=1)  # dJ0/dx: where x is the saddle
    at = np.arange(side.shape[0])
    xi, ji = x[at, grid][:, None], j0[at, grid][:, None]
    loss = (ji - xi * strike) - (j0 - x * strike)
    fits = (loss <= allowed) & (strike < far[:, None])
    lowest = np.min(np.where(fits, strike, np.inf), axis=1)
    next_one = np.max(np.where(strike < far[:, None], strike, -np.inf), axis=1)
    return np.asarray(np.where(np.isfinite(lowest), lowest, next_one))


def _smallest_scaled(
    moments: SideMoments, slice_of: Ints, exponent: Floats, k_low: Floats, k_high: Floats, count: int
) -> Floats:
    """``min over the row's strikes of log V(k) + (p - 1) k``, at the ends, where a log-concave function is least."""
    ends = []
    for k in (k_low, k_high):
        put = k < 0.0
        side = np.where(put, slice_of + count, slice_of)
        log_value = moments.log_value(side, np.abs(k)) + np.where(put, k, 0.0)
        ends.append(log_value + (exponent - 1.0) * k)
    return np.minimum(ends[0], ends[1])


def _period(
    moments: SideMoments,
    slice_of: Ints,
    exponent: Floats,
    k_low: Floats,
    k_high: Floats,
    log_target: Floats,
    smallest: Floats,
    tolerance: float,
    power: int,
) -> Floats:
    """Smallest ``L`` for which some moment order bounds the aliases on either side by the target."""
    count = moments.x.shape[0] // 2
    p = exponent[:, None]
    sides = []
    for side, gap_sign, offset in ((slice_of, 1.0, -k_low), (slice_of + count, -1.0, k_high)):
        x = moments.x[side]
        gap = 1.0 + x - p if gap_sign > 0 else x + p
        log_c = moments.log_power[side] if power == 2 else 0.0
        room = log_c + moments.log_moment[side] - log_target[:, None]
        with np.errstate(divide="ignore", invalid="ignore"):
            length = np.where(gap > 0.0, np.maximum(room, 1.0) / gap, np.inf) + offset[:, None]
        sides.append(length.min(axis=1))
    # the closed-form part of the aliases is subtracted: it must not exceed what rounding lets us subtract
    x_own = np.where(exponent > 0.5, exponent - 1.0, -exponent)
    k_far = np.where(exponent > 0.5, k_high, k_low)
    log_value = smallest - (exponent - 1.0) * k_far
    log_value = np.where(exponent < 0.0, log_value - k_far, log_value)
    with np.errstate(divide="ignore", invalid="ignore"):
        exact = (np.log(0.25 * ROUNDING * EPS / tolerance) - log_value) / x_own
    exact = np.where(exponent == 0.5, 0.0, exact)
    return np.asarray(np.maximum(np.maximum(sides[0], sides[1]), np.maximum(exact, 0.0)))


def _cutoff(model: Model, tau: Floats, exponent: Floats, scale: Floats, log_target: Floats, power: int) -> Floats:
    """Smallest ``U`` (to a few per cent) beyond which the envelope weighs less than the target; inf if none is near."""
    u = (3.0 / scale)[:, None] * _STEP ** np.arange(_STEPS)
    level = model.log_envelope(exponent[:, None], u, tau) + (1 - power) * np.log(u)
    if power < 1:  # such kernels are worth more than the value by their own factor at the saddle
        level -= 0.5 * (2 - power) * np.log(np.abs(exponent * (exponent - 1.0)) + scale**-2)[:, None]
    level -= log_target[:, None]
    above = np.sum(level > 0.0, axis=1)  # the envelope decreases
    at = np.arange(above.shape[0])
    hit = np.minimum(above, _STEPS - 1)
    before = np.maximum(hit - 1, 0)
    l0, l1 = level[at, before], level[at, hit]
    share = np.clip(np.where(l0 > l1, l0 / np.where(l0 > l1, l0 - l1, 1.0), 1.0), 0.0, 1.0)
    cut = u[at, before] + (u[at, hit] - u[at, before]) * np.minimum(1.0, share * 1.02 + 0.02)
    cut = np.where(above == 0, u[:, 0], cut)
    return np.where(above >= _STEPS, np.inf, cut)
