"""Static arbitrage between quotes of one expiry (vertical, butterfly) and across expiries (calendar).

Only what could be *done* counts: one buys at asks and sells at bids. A set of quotes is an arbitrage when a portfolio
of them costs less than nothing and can never pay less than nothing. Calls, ``K1 < K2 < K3``, discount factor ``D``:

    vertical     bid(K2) > ask(K1)                        (sell the claim on less for more)
                 bid(K1) - ask(K2) > D (K2 - K1)          (receive more than the spread can ever cost)
    butterfly    (K3 - K1) bid(K2) > (K3 - K2) ask(K1) + (K2 - K1) ask(K3)
    calendar     bid(K, T1) / (D1 F1) > chord of ask(., T2) / (D2 F2) at the same K / F, T1 < T2

Puts mirror the strikes. The calendar rule at equal forward moneyness: Kahale (2004), Risk 17(5); its total variance
form in Gatheral and Jacquier (2014), Quantitative Finance 14:59-71, lemma 2.1 (both from memory). It holds for European
options when rates and dividend yields are not random. Between two later strikes the chord of their asks is what a
portfolio dominating the missing strike costs (payoffs are convex in the strike), so no interpolated price is ever held
against a quote; outside the later strikes nothing is compared.

Whether an option can be sold into an arbitrage is decided exactly (``engine.market.ladder``): against the running
minimum of the asks, or their convex hull. Which of the quotes is wrong? Every arbitrage found accuses those of its
members that are ``suspect`` on other evidence, or, without any, that take part in the most arbitrages; the accused are
set aside and the rest is searched again, until nothing is left. A stale quote is at odds with many neighbours, each of
which is at odds with it alone, so the stale one stands accused; where nothing tells them apart all members are. Counted
are, for each seller, the best partners of all and those 1, 2, 3, 4, 6, 8, 12, ... ranks away, so that the cost stays
near ``O(n log n)`` on clean chains.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from engine.arrays import Floats, Ints
from engine.market.chain import Bools
from engine.market.ladder import Ladder, cheapest, hull_neighbours, lower_hull

__all__ = ["butterfly", "calendar", "vertical"]

_ROUNDING: Final = 32.0 * float(np.finfo(np.float64).eps)  # of the terms compared: products and sums of up to four
_ROUNDS: Final = 8  # searches after setting the accused aside; what is still at odds then is accused as a whole
_COMBINATIONS: Final = 500_000  # sellers x partners held at once; chains beyond lose other partners, not the best
_CHORDS: Final = ((0, 0), (0, 1), (1, 0), (1, 1))  # steps left and right of the later strikes next to an earlier one


def vertical(ladder: Ladder, *, discount_factors: Floats, suspects: Bools) -> Bools:
    """Rows (size,) accused of a vertical arbitrage.

    ``discount_factors`` (m,) per expiry, raised by what they are uncertain; NaN leaves out the spread's upper bound.
    ``suspects`` (size,): rows to accuse first, here and below.
    """
    return _accuse_in_rounds(ladder, suspects, lambda left: _vertical_members(left, discount_factors))


def butterfly(ladder: Ladder, *, suspects: Bools) -> Bools:
    """Rows (size,) accused of a butterfly arbitrage; needs no forward and no discount factor.

    A bid over the ask of another quote at the same strike is left to ``vertical``.
    """
    return _accuse_in_rounds(ladder, suspects, _butterfly_members)


def calendar(ladder: Ladder, *, years: Floats, uncertainties: Floats, suspects: Bools) -> Bools:
    """Rows (size,) accused of a calendar arbitrage; levels are ``K / F`` (puts ``-K / F``), quotes divided by ``D F``.

    ``years`` (m,) to each expiry. ``uncertainties`` (m, 2), relative, of ``F`` and ``D``: a violation must exceed what
    they explain. A shift ``dF / F`` moves a normalised quote by its value and its level along the slope of the chord, a
    shift ``dD / D`` by its value.
    """
    return _accuse_in_rounds(ladder, suspects, lambda left: _calendar_members(left, years, uncertainties))


def _accuse_in_rounds(ladder: Ladder, suspects: Bools, search: Callable[[Ladder], Ints]) -> Bools:
    """Search, accuse, set aside, search again where something was found: fewer quotes make no new arbitrage."""
    accused = np.zeros(ladder.size, dtype=np.bool_)
    left = ladder
    for _ in range(_ROUNDS):
        found = search(left)
        if not found.size:
            return accused
        members = left.rows[found]
        once = np.ones(members.shape)
        once[:, -1] = members[:, -1] != members[:, -2]  # a quote bought twice takes part once
        parts = np.bincount(members.ravel(), weights=once.ravel(), minlength=ladder.size)
        parts = np.where(suspects, members.size, parts)[members]
        accused[members[parts == parts.max(axis=1, keepdims=True)]] = True
        left = left.without(accused, expiries=left.expiries[found])
    accused[left.rows[search(left)].ravel()] = True
    return accused


@dataclass(frozen=True, slots=True)
class _Partners:
    """Positions (v, w) tried beside each of v sellers, and whether each is one of the same expiry, counted once."""

    at: Ints
    valid: Bools


def _partners(ladder: Ladder, sellers: Ints, best: Ints, *, upward: bool, reach: int) -> _Partners:
    steps = _distances(int(ladder.ranks.max()) + 1)[:reach]
    near = sellers[:, None] + (steps if upward else -steps)
    valid = (near >= 0) & (near < ladder.rows.size)
    near = np.where(valid, near, 0)
    valid &= ladder.expiries[near] == ladder.expiries[sellers][:, None]
    extra = ~np.any(valid & (near == best[:, None]), axis=1) & (best >= 0)
    return _Partners(np.column_stack([near, best]), np.column_stack([valid, extra]))


def _distances(count: int) -> Ints:
    """1, 2, 3, 4, 6, 8, 12, 16, ... below ``count``."""
    powers = 1 << np.arange(max(count, 1).bit_length() + 1)
    both = np.unique(np.concatenate([powers, 3 * powers]))
    return both[both < count].astype(np.int64)


def _vertical_members(ladder: Ladder, discount_factors: Floats) -> Ints:
    """Pairs of positions: the one sold, the one bought."""
    carried = discount_factors[ladder.expiries] * ladder.levels
    rising = _sales(ladder, np.zeros_like(carried), upward=False)
    return np.concatenate([rising, _sales(ladder, carried, upward=True)])


def _sales(ladder: Ladder, carried: Floats, *, upward: bool) -> Ints:
    """Pairs (seller, buyer) with ``bid + carried > ask + carried`` of the other, beyond rounding."""

    def over(seller: Ints, buyer: Ints) -> Bools:
        bid, ask, here, there = ladder.bids[seller], ladder.asks[buyer], carried[seller], carried[buyer]
        return bid - ask + (here - there) > _ROUNDING * (bid + ask + np.abs(here) + np.abs(there))

    best = cheapest(ladder, ladder.asks + carried, upward=upward)
    sellers = np.flatnonzero((best >= 0) & over(np.arange(best.size), best))
    if not sellers.size:
        return np.zeros((0, 2), dtype=np.int64)
    reach = max(1, _COMBINATIONS // sellers.size)
    partners = _partners(ladder, sellers, best[sellers], upward=upward, reach=reach)
    row, column = np.nonzero(partners.valid & over(sellers[:, None], partners.at))
    return np.column_stack([sellers[row], partners.at[row, column]])


def _butterfly_members(ladder: Ladder) -> Ints:
    """Triples of positions: low wing, body, high wing."""

    def over(low: Ints, body: Ints, high: Ints) -> Bools:
        down = ladder.levels[body] - ladder.levels[low]
        up = ladder.levels[high] - ladder.levels[body]
        cost = up * ladder.asks[low] + down * ladder.asks[high]
        income = (down + up) * ladder.bids[body]
        return (income - cost > _ROUNDING * (income + cost)) & (down > 0.0) & (up > 0.0)

    near = hull_neighbours(ladder, lower_hull(ladder))
    bodies = np.flatnonzero((near.left >= 0) & (near.right >= 0) & ~np.isnan(ladder.bids))
    bodies = bodies[over(near.left[bodies], bodies, near.right[bodies])]
    if not bodies.size:
        return np.zeros((0, 3), dtype=np.int64)
    reach = max(1, int((_COMBINATIONS / bodies.size) ** 0.5))
    low = _partners(ladder, bodies, near.left[bodies], upward=False, reach=reach)
    high = _partners(ladder, bodies, near.right[bodies], upward=True, reach=reach)
    found = over(low.at[:, :, None], bodies[:, None, None], high.at[:, None, :])
    row, left, right = np.nonzero(found & low.valid[:, :, None] & high.valid[:, None, :])
    return np.column_stack([low.at[row, left], bodies[row], high.at[row, right]])


def _calendar_members(ladder: Ladder, years: Floats, uncertainties: Floats) -> Ints:
    """Triples of positions: the early quote sold, the two later ones bought (one twice where levels are equal)."""
    vertices, asked = np.flatnonzero(lower_hull(ladder)), np.flatnonzero(ladder.buyable)
    bid = np.flatnonzero(~np.isnan(ladder.bids))
    best = [np.zeros((0, 3), dtype=np.int64)]
    waiting: list[Ints] = []
    for late in np.unique(ladder.expiries):
        early = bid[years[ladder.expiries[bid]] < years[late]]
        waiting.append(_chords(ladder, early, _of(ladder, vertices, late), steps=_CHORDS[:1]))
        if sum(len(chords) for chords in waiting) > _COMBINATIONS:
            best.append(_over_chords(ladder, np.concatenate(waiting), uncertainties))
            waiting = []
    if waiting:
        best.append(_over_chords(ladder, np.concatenate(waiting), uncertainties))
    found = np.concatenate(best)
    if len(found) * len(_CHORDS) > _COMBINATIONS:
        return found
    late_of = ladder.expiries[found[:, 1]]
    near = [
        _chords(ladder, found[late_of == late, 0], _of(ladder, asked, late), steps=_CHORDS)
        for late in np.unique(late_of)
    ]
    if not near:
        return found
    chords = np.concatenate([found, _over_chords(ladder, np.concatenate(near), uncertainties)])
    count = ladder.rows.size  # below two million, so that the number of a chord fits 63 bits
    _, first = np.unique((chords[:, 0] * count + chords[:, 1]) * count + chords[:, 2], return_index=True)
    return np.asarray(chords[first], dtype=np.int64)


def _of(ladder: Ladder, positions: Ints, expiry: int) -> Ints:
    """Those of ``positions`` (ascending) that belong to one expiry."""
    first, end = np.searchsorted(ladder.expiries[positions], [expiry, expiry + 1])
    return positions[first:end]


def _chords(ladder: Ladder, early: Ints, late: Ints, *, steps: tuple[tuple[int, int], ...]) -> Ints:
    """Positions (c, 3) of early quotes and of the ends of chords around their levels, ends among ``late`` (one expiry).

    ``steps`` beyond the nearest position on the left and on the right, one pair a chord; none that is off the end.
    """
    if not late.size:
        return np.zeros((0, 3), dtype=np.int64)
    level = ladder.levels[late]
    after = np.searchsorted(level, ladder.levels[early], side="right")[:, None]
    left = after - 1 - np.array([down for down, _ in steps])
    right = after + np.array([up for _, up in steps])
    at_end = (ladder.levels[early] == level[-1])[:, None]
    right = np.where(at_end, np.minimum(right, late.size - 1), right)
    row, column = np.nonzero((left >= 0) & (right < late.size))
    return np.column_stack([early[row], late[left[row, column]], late[right[row, column]]])


def _over_chords(ladder: Ladder, chords: Ints, uncertainties: Floats) -> Ints:
    """The triples among ``chords`` (c, 3) whose early bid is over the chord of the later asks.

    By more than the forwards and discount factors of both expiries are uncertain, and rounding.
    """
    early, left, right = chords.T
    point, bids = ladder.levels[early], ladder.bids[early]
    gap = ladder.levels[right] - ladder.levels[left]
    slope = np.divide(ladder.asks[right] - ladder.asks[left], gap, out=np.zeros_like(gap), where=gap > 0.0)
    chord = ladder.asks[left] + slope * (point - ladder.levels[left])
    of_discount = np.abs(chord) + bids
    of_forward = of_discount + np.abs(slope * point)
    error = uncertainties[ladder.expiries[early]] + uncertainties[ladder.expiries[left]]
    slack = error[:, 0] * of_forward + error[:, 1] * of_discount + _ROUNDING * of_forward
    over: Bools = bids - chord > slack
    return np.asarray(chords[over], dtype=np.int64)
