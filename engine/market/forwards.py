"""Forward and discount factor of one expiry from put-call parity over its strikes.

Parity for European options: ``C - P = D (F - K)``. With the strikes counted from a centre ``K0`` it is the line
``y_i = level - D (K_i - K0)`` through the differences of call and put midpoints, and ``F = K0 + level / D``. A given
``D`` leaves the level alone (each pair says ``F = K + y / D``), a given ``F`` the slope alone.

Noise. The fair value of a quote is somewhere in its bid-ask interval and nothing says where: uniform, so a midpoint
has variance ``spread^2 / 12`` and a pair ``(call_spread^2 + put_spread^2) / 12``. These are the weights, and the floor
under the noise: residuals can raise the standard errors above it, never lower them, since a market maker's lean
common to all strikes moves the line and leaves no residual. Spreads below a quarter of the median one (locked quotes,
mostly) count as that quarter, so that no pair is taken for exact (common practice, no source). How bad quotes are kept
out of the fit: ``engine.market.regression``.

Standard errors: of ``D`` from the fit's covariance; of ``F = K0 + level / D`` by the delta method.

No expiry raises for what its quotes are like: the answer carries a status and warnings in words.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from enum import IntEnum
from typing import Final

import numpy as np

from engine.arrays import Floats, Ints
from engine.market.chain import Bools, ChainExpiry
from engine.market.regression import CUTOFF, RobustFit, robust_fit

__all__ = ["ForwardFit", "ForwardStatus", "infer_forward"]

_SPREAD_FLOOR: Final = 0.25  # of the median positive spread; common practice, no source
_ROUNDING: Final = 8.0 * float(np.finfo(np.float64).eps)  # of the largest price: subtractions in C - P and D (F - K)
_LOOSE_DISCOUNT: Final = 0.02  # warn when D is known to worse than 2 %; common practice, no source
_RATE_LIMIT: Final = 0.25  # warn when the implied rate is surely beyond +-25 % a year; common practice, no source
_MANY_OUTLIERS: Final = 1.0 / 3.0  # warn when more than a third of the pairs disagree; common practice, no source


class ForwardStatus(IntEnum):
    """Where forward and discount factor come from, or why they are not there."""

    FITTED = 0  # at least one of the two from the quotes
    GIVEN = 1  # both were given
    TOO_FEW_PAIRS = 2  # fewer strikes with call and put two-sided than unknowns
    DEGENERATE = 3  # the pairs' strikes coincide, or the line has no positive discount factor or forward
    EXPIRED = 4  # expiry is not a positive number of years

    @property
    def word(self) -> str:
        """The name as it appears in answers, e.g. ``"too_few_pairs"``."""
        return self.name.lower()


@dataclass(frozen=True, slots=True)
class ForwardFit:
    """Forward and discount factor of one expiry, NaN where ``status`` says why; what was given is returned as given.

    ``forward_error``, ``discount_factor_error``: one standard error, NaN for a given value or where there is no basis
    for one. ``pairs`` strikes quoted two-sided on both sides, ``pairs_used`` of them in the fit. ``outliers`` (n,)
    pairs left out.
    ``rms_residual``: root mean square of ``C - P - D (F - K)`` over the pairs used, price units, NaN without pairs.
    ``noise_scale`` >= 1: residual noise in units of what the spreads explain. ``line_errors`` (n,): standard
    error of ``D (F - K)`` at each strike, 0 for given values.
    """

    forward: float
    discount_factor: float
    forward_error: float
    discount_factor_error: float
    pairs: int
    pairs_used: int
    rms_residual: float
    noise_scale: float
    outliers: Bools
    line_errors: Floats
    status: ForwardStatus
    warnings: tuple[str, ...]

    @property
    def known(self) -> bool:
        """Whether forward and discount factor are both there."""
        return self.status in (ForwardStatus.FITTED, ForwardStatus.GIVEN)

    @property
    def forward_uncertainty(self) -> float:
        """The standard error, 0 where the forward was given or no basis for one exists."""
        return self.forward_error if math.isfinite(self.forward_error) else 0.0

    @property
    def discount_factor_uncertainty(self) -> float:
        """The standard error, 0 where the discount factor was given or no basis for one exists."""
        return self.discount_factor_error if math.isfinite(self.discount_factor_error) else 0.0


@dataclass(frozen=True, slots=True)
class _Pairs:
    """The strikes both of whose sides are quoted: their rows in the chain, strikes, C - P and its deviation."""

    rows: Ints
    strikes: Floats
    differences: Floats
    deviations: Floats
    spread_known: bool


def infer_forward(chain: ChainExpiry, *, cutoff: float = CUTOFF) -> ForwardFit:
    """Forward and discount factor of ``chain``, those given kept, the rest by robust parity regression.

    ``cutoff``: standardised residual beyond which a pair is left out, see ``engine.market.regression``; at 2.5 or more
    no pair whose executable interval [call bid - put ask, call ask - put bid] contains the line is left out. Robust to
    a minority of bad pairs once there are four (three with one value given). Never raises.
    """
    if not (math.isfinite(chain.expiry) and chain.expiry > 0.0):
        return _nothing(
            chain, 0, ForwardStatus.EXPIRED, "expiry is not a positive number of years: nothing is inferred"
        )
    pairs = _pairs(chain)
    if chain.forward is not None and chain.discount_factor is not None:
        return _given(chain, pairs, cutoff)
    unknowns = 2 - (chain.forward is not None) - (chain.discount_factor is not None)
    count = int(pairs.strikes.size)
    if count < unknowns:
        return _nothing(chain, count, ForwardStatus.TOO_FEW_PAIRS, _too_few(count, unknowns))
    if unknowns == 2 and float(np.ptp(pairs.strikes)) == 0.0:
        return _nothing(chain, count, ForwardStatus.DEGENERATE, "all pairs have the same strike: parity gives no slope")
    if chain.forward is not None and bool(np.all(pairs.strikes == chain.forward)):
        reason = "all pairs are struck at the given forward: parity says nothing about the discount factor"
        return _nothing(chain, count, ForwardStatus.DEGENERATE, reason)
    return _fitted(chain, pairs, cutoff)


def _pairs(chain: ChainExpiry) -> _Pairs:
    rows = np.flatnonzero(chain.paired)
    call_spreads = (chain.call_asks - chain.call_bids)[rows]
    put_spreads = (chain.put_asks - chain.put_bids)[rows]
    spreads = np.concatenate([call_spreads, put_spreads])
    positive = spreads[spreads > 0.0]
    floor = _SPREAD_FLOOR * float(np.median(positive)) if positive.size else 0.0
    largest = np.maximum(chain.call_asks[rows], chain.put_asks[rows]) + chain.strikes[rows]
    variance = (np.maximum(call_spreads, floor) ** 2 + np.maximum(put_spreads, floor) ** 2) / 12.0
    deviations = np.sqrt(variance + (_ROUNDING * largest) ** 2)
    differences = (chain.call_mids - chain.put_mids)[rows]
    return _Pairs(rows, chain.strikes[rows], differences, deviations, bool(positive.size))


def _fitted(chain: ChainExpiry, pairs: _Pairs, cutoff: float) -> ForwardFit:
    line = _line(chain, pairs, cutoff)
    forward, discount, fit = line.forward, line.discount_factor, line.fit
    if not (discount > 0.0 and forward > 0.0):
        reason = f"the parity line has discount factor {discount:.6g} and forward {forward:.6g}: not a market"
        return _nothing(chain, int(pairs.rows.size), ForwardStatus.DEGENERATE, reason)
    residuals = pairs.differences - discount * (forward - pairs.strikes)
    outliers = np.zeros(chain.size, dtype=np.bool_)
    outliers[pairs.rows[~fit.kept]] = True
    used = int(np.count_nonzero(fit.kept))
    believable = pairs.spread_known or used > fit.coefficients.size
    out = ForwardFit(
        forward=forward,
        discount_factor=discount,
        forward_error=_error(
            float(line.gradient @ fit.covariance @ line.gradient), chain.forward is None and believable
        ),
        discount_factor_error=_error(float(fit.covariance[-1, -1]), chain.discount_factor is None and believable),
        pairs=int(pairs.rows.size),
        pairs_used=used,
        rms_residual=float(np.sqrt(np.mean(residuals[fit.kept] ** 2))),
        noise_scale=fit.scale,
        outliers=outliers,
        line_errors=np.sqrt(np.einsum("ni,ij,nj->n", line.slopes, fit.covariance, line.slopes)),
        status=ForwardStatus.FITTED,
        warnings=(),
    )
    return replace(out, warnings=_doubts(chain, out, fit, pairs))


@dataclass(frozen=True, slots=True)
class _Line:
    """The parity line found: ``gradient`` (p,) of the forward and ``slopes`` (n, p) of ``D (F - K)`` at every strike of
    the chain, both with respect to the coefficients of ``fit``."""

    forward: float
    discount_factor: float
    fit: RobustFit
    gradient: Floats
    slopes: Floats


def _line(chain: ChainExpiry, pairs: _Pairs, cutoff: float) -> _Line:
    """One coefficient (level or discount factor) where the other value is given, both otherwise."""
    values, deviations = pairs.differences, pairs.deviations
    if chain.forward is not None:
        fit = robust_fit((chain.forward - pairs.strikes)[:, None], values, deviations, cutoff=cutoff)
        discount = float(fit.coefficients[0])
        return _Line(chain.forward, discount, fit, np.zeros(1), (chain.forward - chain.strikes)[:, None])
    centre = float(np.average(pairs.strikes, weights=deviations**-2.0))
    distances = pairs.strikes - centre
    ones = np.ones_like(distances)
    if chain.discount_factor is not None:
        discount = chain.discount_factor
        fit = robust_fit(ones[:, None], values + discount * distances, deviations, cutoff=cutoff)
        forward = centre + float(fit.coefficients[0]) / discount
        return _Line(forward, discount, fit, np.array([1.0 / discount]), np.ones((chain.size, 1)))
    fit = robust_fit(np.column_stack([ones, -distances]), values, deviations, cutoff=cutoff)
    level, discount = float(fit.coefficients[0]), float(fit.coefficients[1])
    forward = centre + level / discount if discount > 0.0 else math.nan
    gradient = np.array([1.0 / discount, -level / discount**2]) if discount > 0.0 else np.zeros(2)
    return _Line(forward, discount, fit, gradient, np.column_stack([np.ones(chain.size), centre - chain.strikes]))


def _doubts(chain: ChainExpiry, out: ForwardFit, fit: RobustFit, pairs: _Pairs) -> tuple[str, ...]:
    """What a reader of the fit should know, in words."""
    words: list[str] = []
    unknowns = int(fit.coefficients.size)
    if out.pairs == unknowns:
        words.append(f"only {out.pairs} pair(s) for {unknowns} unknown(s): nothing checks the parity line")
    if not fit.decided:
        words.append(f"{out.pairs} pairs disagree beyond their spreads and are too few to tell which is wrong")
    if out.pairs - out.pairs_used > _MANY_OUTLIERS * out.pairs:
        words.append(f"{out.pairs - out.pairs_used} of {out.pairs} pairs disagree with the parity line of the others")
    if pairs.spread_known and out.noise_scale > 2.0:
        words.append(f"parity residuals are {out.noise_scale:.1f} times what the spreads explain")
    if not math.isfinite(out.discount_factor_error) and not math.isfinite(out.forward_error):
        words.append("the quotes have no spread and leave no residual: no standard error can be given")
    if chain.discount_factor is None:
        if out.discount_factor_error > _LOOSE_DISCOUNT * out.discount_factor:
            words.append(
                f"the discount factor is known only to +-{out.discount_factor_error:.3g} (one standard error): "
                "giving it would sharpen forward and volatilities"
            )
        slack = 2.0 * out.discount_factor_uncertainty / out.discount_factor
        if abs(math.log(out.discount_factor)) - slack > _RATE_LIMIT * chain.expiry:
            rate = -math.log(out.discount_factor) / chain.expiry
            words.append(f"the discount factor implies a rate of {rate:.1%} a year: check units and dates")
    return tuple(words)


def _given(chain: ChainExpiry, pairs: _Pairs, cutoff: float) -> ForwardFit:
    """Both given: only residuals are left to judge, against the spreads alone."""
    forward, discount = float(chain.forward or math.nan), float(chain.discount_factor or math.nan)
    residuals = pairs.differences - discount * (forward - pairs.strikes)
    outside = np.abs(residuals) > cutoff * pairs.deviations
    outliers = np.zeros(chain.size, dtype=np.bool_)
    outliers[pairs.rows[outside]] = True
    count, used = int(residuals.size), int(np.count_nonzero(~outside))
    words: tuple[str, ...] = ()
    if count and count - used > _MANY_OUTLIERS * count:
        words = (f"{count - used} of {count} pairs disagree with the forward and discount factor given",)
    rms = float(np.sqrt(np.mean(residuals[~outside] ** 2))) if used else math.nan
    zeros = np.zeros(chain.size)
    return ForwardFit(
        forward, discount, math.nan, math.nan, count, used, rms, 1.0, outliers, zeros, ForwardStatus.GIVEN, words
    )


def _nothing(chain: ChainExpiry, count: int, status: ForwardStatus, reason: str) -> ForwardFit:
    forward = math.nan if chain.forward is None else chain.forward
    discount = math.nan if chain.discount_factor is None else chain.discount_factor
    none, unknown = np.zeros(chain.size, dtype=np.bool_), np.full(chain.size, np.nan)
    return ForwardFit(forward, discount, math.nan, math.nan, count, 0, math.nan, 1.0, none, unknown, status, (reason,))


def _too_few(count: int, unknowns: int) -> str:
    asked = "forward and discount factor" if unknowns == 2 else "the value that was not given"
    return f"{count} strike(s) with call and put both two-sided: {asked} cannot be inferred"


def _error(variance: float, wanted: bool) -> float:
    return math.sqrt(variance) if wanted else math.nan
