"""Quotes of one kind, all expiries end to end, sorted so that arbitrage between strikes can be searched without a loop.

Calls lose value as the strike rises, puts as it falls. With ``level`` the strike for calls and minus the strike for
puts both kinds lose value along the level, so one search serves both.

Whether some portfolio of one or two others dominates an option and costs less than its bid is answered exactly, for
every option at once, by two structures: running minima of the asks (a claim on more, bought) and their lower convex
hull (two options whose mixture dominates the one between: payoffs are convex in the strike).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats, Ints
from engine.market.chain import Bools

__all__ = ["Ladder", "Nearest", "cheapest", "hull_neighbours", "lower_hull"]


@dataclass(frozen=True, slots=True)
class Ladder:
    """Columns (q,) in ascending order of expiry number and, within it, level.

    ``rows`` are the positions among all ``size`` rows of the chain, ``expiries`` the number of the expiry, ``ranks``
    the position within it; ``bids`` and ``asks`` are NaN where one cannot deal. Quotes that can be dealt on neither
    side, crossed ones and those without a finite level are left out.
    """

    rows: Ints
    expiries: Ints
    ranks: Ints
    levels: Floats
    bids: Floats
    asks: Floats
    size: int

    @classmethod
    def calls(cls, strikes: Floats, bids: Floats, asks: Floats, expiries: Ints) -> Ladder:
        """Calls (n,) in any order; a bid of zero is no deal."""
        return cls._of(strikes, bids, asks, expiries)

    @classmethod
    def puts(cls, strikes: Floats, bids: Floats, asks: Floats, expiries: Ints) -> Ladder:
        """Puts (n,) in any order; a bid of zero is no deal."""
        return cls._of(-strikes, bids, asks, expiries)

    @classmethod
    def _of(cls, levels: Floats, bids: Floats, asks: Floats, expiries: Ints) -> Ladder:
        bids = np.where(bids > 0.0, bids, np.nan)
        deals = ~(np.isnan(bids) & np.isnan(asks)) & ~(bids > asks) & np.isfinite(levels)
        rows = np.flatnonzero(deals)
        rows = rows[np.lexsort((asks[rows], levels[rows], expiries[rows]))]
        whole = cls(rows, expiries[rows], np.zeros_like(rows), levels[rows], bids[rows], asks[rows], levels.size)
        return whole._only(np.ones(rows.size, dtype=np.bool_))

    def without(self, accused: Bools, *, expiries: Ints) -> Ladder:
        """The part of the ladder that belongs to ``expiries``, with the rows of ``accused`` (size,) set aside."""
        return self._only(~accused[self.rows] & np.isin(self.expiries, expiries))

    @property
    def buyable(self) -> Bools:
        """Positions (q,) with an ask that no other of the same level undercuts."""
        out = ~np.isnan(self.asks)
        same = (self.expiries[1:] == self.expiries[:-1]) & (self.levels[1:] == self.levels[:-1])
        out[1:] &= ~same  # sorted by ask within a level: the first is the cheapest
        return out

    def _only(self, keep: Bools) -> Ladder:
        expiries = self.expiries[keep]
        first = np.searchsorted(expiries, expiries, side="left")
        ranks = np.arange(expiries.size, dtype=np.int64) - first
        return Ladder(self.rows[keep], expiries, ranks, self.levels[keep], self.bids[keep], self.asks[keep], self.size)


@dataclass(frozen=True, slots=True)
class Nearest:
    """Positions (q,) in the ladder to the left and right, -1 where there is none."""

    left: Ints
    right: Ints


def cheapest(ladder: Ladder, costs: Floats, *, upward: bool) -> Ints:
    """Positions (q,) of the least of ``costs`` (q,) at the same expiry strictly after (``upward``) or before.

    -1 where there is none. NaN costs are never chosen. ``O(q)`` on a table of expiries by ranks.
    """
    if not costs.size:
        return np.zeros(0, dtype=np.int64)
    expiries, position = np.unique(ladder.expiries, return_inverse=True)
    table = np.full((expiries.size, int(ladder.ranks.max()) + 1), np.inf)
    table[position, ladder.ranks] = np.where(np.isnan(costs), np.inf, costs)
    if upward:
        table = table[:, ::-1]
    running = np.minimum.accumulate(table, axis=1)
    at = np.maximum.accumulate(np.where(table == running, np.arange(table.shape[1]), 0), axis=1)
    before = np.full(table.shape, -1, dtype=np.int64)
    before[:, 1:] = np.where(np.isfinite(running[:, :-1]), at[:, :-1], -1)
    if upward:
        before = np.where(before >= 0, table.shape[1] - 1 - before, -1)[:, ::-1]
    ranks = before[position, ladder.ranks]
    start = np.arange(costs.size) - ladder.ranks
    return np.where(ranks >= 0, start + ranks, -1)


def lower_hull(ladder: Ladder) -> Bools:
    """Positions (q,) that are vertices of the lower convex hull of the asks of their expiry.

    Every point above the chord of its two neighbours is dropped, all at once, until none is: neighbours belong to the
    set, so a dropped point is above the hull, and what is left at the end is convex, hence the hull.
    """
    alive = np.flatnonzero(ladder.buyable)
    while alive.size > 2:
        x, y, e = ladder.levels[alive], ladder.asks[alive], ladder.expiries[alive]
        to_left, to_right = x[1:-1] - x[:-2], x[2:] - x[1:-1]
        above = (to_left + to_right) * y[1:-1] > to_right * y[:-2] + to_left * y[2:]
        above &= e[:-2] == e[2:]
        if not above.any():
            break
        alive = alive[np.concatenate([[True], ~above, [True]])]
    out = np.zeros(ladder.rows.size, dtype=np.bool_)
    out[alive] = True
    return out


def hull_neighbours(ladder: Ladder, vertices: Bools) -> Nearest:
    """For each position the last vertex (q,) of its expiry strictly before it and the first strictly after it."""
    count = vertices.size
    here = np.arange(count, dtype=np.int64)
    left = np.full(count, -1, dtype=np.int64)
    right = np.full(count, count, dtype=np.int64)
    left[1:] = np.maximum.accumulate(np.where(vertices, here, -1))[:-1]
    right[:-1] = np.minimum.accumulate(np.where(vertices, here, count)[::-1])[::-1][1:]
    right[right == count] = -1
    left[ladder.expiries[left] != ladder.expiries] = -1
    right[ladder.expiries[right] != ladder.expiries] = -1
    return Nearest(left, right)
