"""Static arbitrage between quotes of one expiry (vertical, butterfly) and across expiries (calendar).

Only what could be *done* counts: one buys at asks and sells at bids. A set of quotes is an arbitrage when a portfolio
of them costs less than nothing and can never pay less than nothing. Calls, ``K1 < K2 < K3``, discount factor ``D``:

    vertical     bid(K2) > ask(K1)                                    (sell the dearer claim on less)
                 bid(K1) - ask(K2) > D (K2 - K1)                      (receive more than the spread can ever cost)
                 bid(K1) > D F                                        (an option dearer than the forward it is bounded by)
    butterfly    (K3 - K1) bid(K2) > (K3 - K2) ask(K1) + (K2 - K1) ask(K3)
    calendar     bid(K, T1) / (D1 F1) > chord of ask(., T2) / (D2 F2) at the same K / F, T1 < T2

Puts mirror the strikes; their bound is ``D K``. The calendar rule at equal forward moneyness: Kahale (2004), Risk 17(5);
total variance form in Gatheral and Jacquier (2014), Quantitative Finance 14:59-71, lemma 2.1 (both from memory). It holds
for European options when rates and dividend yields are not random. Between two later strikes the chord of their asks is
what a portfolio dominating the missing strike costs (payoffs are convex in the strike), so no interpolated price
is ever held against a quote; outside the later strikes nothing is compared.

Which of the quotes is wrong? Every arbitrage found accuses those of its members that take part in the most arbitrages; the
accused are set aside and the rest is searched again. A stale quote is at odds with many neighbours, each of which is at odds
with it alone, so the stale one stands accused; where nothing tells them apart all members are.

Searched are strikes 1, 2, 3, 4, 6, 8, 12, 16, ... ranks apart (all scales of the chain, about ``2 log2 n`` distances), so the cost
is ``O(n log^2 n)`` and the arrays are flat; no loop runs over strikes.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np

from engine.arrays import Floats, Ints
from engine.market.chain import Bools

__all__ = ["Side", "butterfly", "calendar", "vertical"]

_ROUNDING: Final = 32.0 * float(np.finfo(np.float64).eps)  # of the terms compared: products and sums of up to four
_ROUNDS: Final = 8  # searches after setting the accused aside; what is still at odds then is accused as a whole
_TRIPLES: Final = 2_000_000  # index triples held at once; longer chains are searched with symmetric wings alone


@dataclass(frozen=True, slots=True)
class Side:
    """The calls, or the puts with mirrored strikes, of one expiry in ascending order of ``ladder``.

    ``order`` (n,) maps to the rows of the chain; ``ladder`` is the strike for calls and minus the strike for puts, so that on either
    side value falls along it; NaN in ``bids`` or ``asks`` where one cannot deal.
    """

    order: Ints
    ladder: Floats
    bids: Floats
    asks: Floats

    @classmethod
    def calls(cls, strikes: Floats, bids: Floats, asks: Floats) -> Side:
        """Quotes (n,) of calls in any order; quotes with neither bid nor ask and crossed ones are left out."""
        return cls._of(strikes, bids, asks)

    @classmethod
    def puts(cls, strikes: Floats, bids: Floats, asks: Floats) -> Side:
        """The same for puts."""
        return cls._of(-strikes, bids, asks)

    @classmethod
    def _of(cls, ladder: Floats, bids: Floats, asks: Floats) -> Side:
        order = np.argsort(ladder, kind="stable")
        order = order[~(np.isnan(bids) & np.isnan(asks))[order] & ~(bids > asks)[order]]
        return cls(order, ladder[order], bids[order], asks[order])

    def without(self, rows: Bools) -> Side:
        """The side with the quotes of ``rows`` (one per row of the chain) set aside."""
        keep = ~rows[self.order]
        return Side(self.order[keep], self.ladder[keep], self.bids[keep], self.asks[keep])


def vertical(side: Side, size: int, *, discount_factor: float, bound_slack: float = 0.0) -> Bools:
    """Rows (size,) accused of a vertical arbitrage. ``discount_factor`` NaN leaves out the spread's upper bound.

    ``bound_slack`` widens ``D`` in the upper bound (pass two standard errors). Bounds by the forward are in ``engine.market.cleaning``.
    """

    def search(part: Side) -> Ints:
        return _vertical_members(part, discount_factor + bound_slack)

    return _accuse_in_rounds(side, size, search)


def butterfly(side: Side, size: int) -> Bools:
    """Rows (size,) accused of a butterfly arbitrage; needs no forward and no discount factor."""
    return _accuse_in_rounds(side, size, _butterfly_members)


def calendar(
    sides: Sequence[Side], sizes: Sequence[int], *, expiries: Floats, scales: Floats, slacks: Floats
) -> list[Bools]:
    """Rows accused of a calendar arbitrage, per expiry, among sides of one kind with normalised quotes.

    Each side's ladder is ``K / F`` (or ``-K / F``) and its quotes are divided by ``D F``. ``scales`` (m, 2) are the relative standard
    errors of ``F`` and ``D``; a violation must exceed ``slacks`` of them: a shift ``dF / F`` moves a normalised quote by its value
    and its strike along the slope of the chord, a shift ``dD / D`` by its value.
    """
    starts = np.concatenate([[0], np.cumsum(np.asarray(sizes, dtype=np.int64))])
    accused = np.zeros(int(starts[-1]), dtype=np.bool_)
    ranks = np.argsort(expiries, kind="stable")
    left = list(sides)
    for _ in range(_ROUNDS):
        found: list[Ints] = []
        for distance in _distances(len(left)):
            for early, late in zip(ranks[:-distance], ranks[distance:], strict=True):
                if expiries[early] < expiries[late]:
                    error = slacks[early] * scales[early] + slacks[late] * scales[late]
                    found.append(
                        _calendar_members(left[early], left[late], error, int(starts[early]), int(starts[late]))
                    )
        members = np.concatenate(found) if found else np.zeros((0, 3), dtype=np.int64)
        if not members.size:
            break
        accused |= _accused(members, accused.size)
        left = [side.without(accused[starts[i] : starts[i + 1]]) for i, side in enumerate(left)]
    return [accused[starts[i] : starts[i + 1]] for i in range(len(sides))]


def _accuse_in_rounds(side: Side, size: int, search: Callable[[Side], Ints]) -> Bools:
    accused = np.zeros(size, dtype=np.bool_)
    left = side
    for _ in range(_ROUNDS):
        members = search(left)
        if not members.size:
            return accused
        accused |= _accused(left.order[members], size)
        left = side.without(accused)
    accused[left.order[search(left)].ravel()] = True
    return accused


def _accused(members: Ints, size: int) -> Bools:
    """Of each arbitrage (one row of ``members``) those members that take part in the most arbitrages."""
    parts = np.bincount(members.ravel(), minlength=size)[members]
    accused = np.zeros(size, dtype=np.bool_)
    accused[members[parts == parts.max(axis=1, keepdims=True)]] = True
    return accused


def _vertical_members(side: Side, discount_factor: float) -> Ints:
    distances = _distances(side.ladder.size)
    if not distances:
        return np.zeros((0, 2), dtype=np.int64)
    low = np.concatenate([np.arange(side.ladder.size - d, dtype=np.int64) for d in distances])
    high = low + np.repeat(np.asarray(distances), [side.ladder.size - d for d in distances])
    rising = side.bids[high] > side.asks[low]
    width = discount_factor * (side.ladder[high] - side.ladder[low])
    gain = side.bids[low] - side.asks[high] - width
    steep = gain > _ROUNDING * (side.bids[low] + side.asks[high] + width)
    found = rising | steep
    return np.column_stack([low[found], high[found]])


def _butterfly_members(side: Side) -> Ints:
    low, body, high = _triples(side.ladder.size)
    left, right = side.ladder[body] - side.ladder[low], side.ladder[high] - side.ladder[body]
    cost = right * side.asks[low] + left * side.asks[high]
    income = (left + right) * side.bids[body]
    found = (income - cost > _ROUNDING * (income + cost)) & (left > 0.0) & (right > 0.0)
    return np.column_stack([low[found], body[found], high[found]])


def _calendar_members(early: Side, late: Side, error: Floats, early_start: int, late_start: int) -> Ints:
    """Violations of the early bids against four chords of the late asks around each: members in the numbering of all rows."""
    none = np.zeros((0, 3), dtype=np.int64)
    can_buy = np.flatnonzero(~np.isnan(late.asks))
    can_sell = np.flatnonzero(early.bids > 0.0)
    if can_buy.size < 2 or not can_sell.size:
        return none
    ladder, asks = late.ladder[can_buy], late.asks[can_buy]
    points, bids = early.ladder[can_sell], early.bids[can_sell]
    above = np.searchsorted(ladder, points, side="right")
    left = (above - 1)[:, None] - np.array([0, 0, 1, 1])
    right = above[:, None] + np.array([0, 1, 0, 1])
    at_last = points == ladder[-1]  # the point is a strike: its own ask is the chord
    right = np.where(at_last[:, None], np.minimum(right, ladder.size - 1), right)
    inside = (left >= 0) & (right < ladder.size)
    left, right = np.clip(left, 0, ladder.size - 1), np.clip(right, 0, ladder.size - 1)
    gap = ladder[right] - ladder[left]
    slope = np.divide(asks[right] - asks[left], gap, out=np.zeros_like(gap), where=gap > 0.0)
    chord = asks[left] + slope * (points[:, None] - ladder[left])
    value = np.abs(chord) + np.abs(bids)[:, None]
    slack = error[0] * (value + np.abs(slope * points[:, None])) + error[1] * value
    rows, chords = np.nonzero(inside & (bids[:, None] - chord > slack + _ROUNDING * value))
    sellers = early.order[can_sell[rows]] + early_start
    buyers = late.order[can_buy]
    return np.column_stack([sellers, buyers[left[rows, chords]] + late_start, buyers[right[rows, chords]] + late_start])


def _distances(count: int) -> tuple[int, ...]:
    """1, 2, 3, 4, 6, 8, 12, 16, ... below ``count``."""
    powers = 1 << np.arange(max(count, 1).bit_length() + 1)
    both = np.unique(np.concatenate([powers, 3 * powers]))
    return tuple(int(d) for d in both[both < count])


@lru_cache(maxsize=64)
def _triples(count: int) -> tuple[Ints, Ints, Ints]:
    """Low wing, body and high wing of every butterfly searched in a chain of ``count`` strikes."""
    distances = _distances(count)
    down, up = (np.asarray(grid).ravel() for grid in np.meshgrid(distances, distances, indexing="ij"))
    if down.size * count > _TRIPLES:
        down = up = np.asarray(distances, dtype=np.int64)
    fits = down + up < count
    down, up = down[fits].astype(np.int64), up[fits].astype(np.int64)
    lengths = count - down - up
    first = np.repeat(np.cumsum(lengths) - lengths, lengths)
    low = np.arange(int(lengths.sum()), dtype=np.int64) - first
    return low, low + np.repeat(down, lengths), low + np.repeat(down + up, lengths)
