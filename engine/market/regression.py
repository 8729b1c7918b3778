"""Weighted linear regression that up to half of the observations cannot spoil, with a floor under its noise.

Problem: ``values = design @ coefficients + noise``, ``noise_i`` of standard deviation ``deviations_i`` known
beforehand, except that a minority of the observations are plainly wrong, perhaps all in the same direction (stale
quotes are).

1. If the weighted least-squares line passes every observation within ``cutoff`` deviations, nothing speaks
   against any of them and that line is the answer.
2. Otherwise start from a line with a high breakdown point: least trimmed squares over elemental subsets (exact lines
   through one or two observations), the sum running over the ``n // 2 + 1`` smallest squared standardised residuals,
   improved by concentration steps. Rousseeuw (1984), J. Amer. Statist. Assoc. 79:871-880; concentration steps by
   Rousseeuw and Van Driessen (2006), Data Min. Knowl. Discov. 12:29-45 (both from memory).
3. Then reweighted least squares: observations beyond ``cutoff`` scales are left out, the line is fitted again, until
   the kept set stays the same. Rousseeuw and Leroy (1987), Robust Regression and Outlier Detection, chapter 5, cutoff
   2.5 (from memory). Twice if need be:

   a. at scale one, which is known beforehand. This is the answer when it explains a majority, the kept residuals are no
      larger than the deviations say, and what was left out stands *apart*: next to nobody is just beyond the cutoff.
   b. else the noise is larger than was known: the start's scale is ``1.4826 (1 + 5 / (n - p)) median |r|`` (same
      source), then the scale of the kept residuals, corrected for the cut and by the same small-sample factor.

   Scale one comes first because a residual scale is swollen by the very observations it shall expose: with 40 % of
   them off by six deviations to the same side, b alone keeps a third of those and two standard errors cover 26 % of the
   time, a and b together 90 %. Bad observations less than four deviations off, where they are many, cannot be told from
   noise. Under normal noise of 1.5, 2, 3 and 17 times the deviations two standard errors cover 93 to 96 % (all
   simulated, 40 observations).

The scale multiplies ``deviations`` and is never taken below one: residuals may show that the noise is larger than was
known beforehand, never that it is smaller, because errors shared by all observations leave no residual.
The cutoff 2.5 fits bid-ask intervals exactly: an error uniform in an interval of width w has deviation w / sqrt(12),
so the sum of two stays within (w1 + w2) / 2 <= sqrt(6) = 2.449 joint deviations (Cauchy-Schwarz). No observation
whose interval contains the line is ever left out.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from engine.arrays import Floats, Ints
from engine.market.chain import Bools

__all__ = ["CUTOFF", "RobustFit", "robust_fit"]

CUTOFF: Final = 2.5  # Rousseeuw and Leroy (1987), from memory
_CANDIDATES: Final = 1500  # elemental subsets tried where there are more; all of them up to 55 observations
_LEAST_CANDIDATES: Final = 200  # with 40 % bad observations a subset of two is good with odds 0.36: 0.64^200 = 1e-39
_PRODUCTS: Final = 3_000_000  # residuals held at once while subsets are tried (24 MB); fewer subsets beyond
_SEED: Final = 1984  # the subsets drawn from long chains are the same ones every time
_APART: Final = 1.5  # what is left out may not stand between one and this many cutoffs, but for
_NEAR: Final = 40  # one in this many; both settled by simulation, see the module docstring
_STEPS: Final = 20  # concentration and reweighting steps; both settle in fewer than ten on every chain tried


@dataclass(frozen=True, slots=True)
class RobustFit:
    """``coefficients`` (p,), their ``covariance`` (p, p), ``scale`` >= 1 in units of the deviations given,
    ``kept`` (n,) observations the line rests on, ``decided`` false when too few observations disagree to tell which
    is wrong."""

    coefficients: Floats
    covariance: Floats
    scale: float
    kept: Bools
    decided: bool


def robust_fit(design: Floats, values: Floats, deviations: Floats, *, cutoff: float = CUTOFF) -> RobustFit:
    """Fit ``values`` (n,) on ``design`` (n, p), p = 1 or 2, n >= p, of full rank, with positive ``deviations`` (n,).

    Breakdown point one half from n = p + 2 on; with fewer observations none is left out and ``decided`` says whether
    they agree. Deterministic.
    """
    count, width = design.shape
    rows, target = design / deviations[:, None], values / deviations
    everything = np.ones(count, dtype=np.bool_)
    coefficients = _least_squares(rows, target, everything)
    residuals = np.abs(target - rows @ coefficients)
    agreed = bool(np.all(residuals <= cutoff))
    if agreed or count < width + 2:
        return _finish(rows, target, everything, 1.0, decided=agreed)
    start = _trimmed_start(rows, target)
    kept = _settled(rows, target, start, cutoff, _known_scale)
    if _explained(rows, target, kept, cutoff):
        return _finish(rows, target, kept, 1.0, decided=True)
    truncation = _truncated_deviation(cutoff)
    scale = max(1.0, _small_sample(count - width) * 1.4826 * float(np.median(np.abs(target - rows @ start))))

    def of_residuals(residuals: Floats, kept: Bools) -> float:
        return max(1.0, _residual_scale(residuals, kept, width) / truncation)

    kept = _settled(rows, target, start, cutoff, of_residuals, scale=scale)
    if not _full_rank(rows, kept):
        return _finish(rows, target, everything, 1.0, decided=False)
    freedom = int(np.count_nonzero(kept)) - width
    return _finish(rows, target, kept, _small_sample(freedom) / truncation, decided=True)


def _known_scale(residuals: Floats, kept: Bools) -> float:
    return 1.0


def _settled(
    rows: Floats,
    target: Floats,
    start: Floats,
    cutoff: float,
    scale_of: Callable[[Floats, Bools], float],
    *,
    scale: float = 1.0,
) -> Bools:
    """Observations (n,) within ``cutoff`` scales of the least-squares line through themselves, from ``start`` on."""
    kept = np.abs(target - rows @ start) <= cutoff * scale
    for _ in range(_STEPS):
        if not _full_rank(rows, kept):
            break
        residuals = np.abs(target - rows @ _least_squares(rows, target, kept))
        again = residuals <= cutoff * scale_of(residuals, kept)
        if np.array_equal(again, kept):
            break
        kept = again
    return kept


def _explained(rows: Floats, target: Floats, kept: Bools, cutoff: float) -> bool:
    """Whether scale one holds: a majority kept, with residuals of that size, and the others standing apart."""
    count, used = int(kept.size), int(np.count_nonzero(kept))
    if 2 * used <= count or not _full_rank(rows, kept):
        return False
    residuals = np.abs(target - rows @ _least_squares(rows, target, kept))
    near = int(np.count_nonzero((residuals > cutoff) & (residuals <= _APART * cutoff)))
    freedom = used - rows.shape[1]
    excess = float(np.sum(residuals[kept] ** 2)) / freedom - 1.0
    return near <= max(1, count // _NEAR) and excess <= 2.0 * math.sqrt(2.0 / freedom)


def _finish(rows: Floats, target: Floats, kept: Bools, correction: float, *, decided: bool) -> RobustFit:
    """Line, covariance and scale (of the residuals, times ``correction``, at least one) by the observations kept."""
    coefficients = _least_squares(rows, target, kept)
    residuals = np.abs(target - rows @ coefficients)
    scale = max(1.0, correction * _residual_scale(residuals, kept, rows.shape[1]))
    information = rows[kept].T @ rows[kept]
    covariance = np.asarray(scale**2 * np.linalg.inv(information), dtype=np.float64)
    return RobustFit(coefficients, covariance, scale, kept, decided)


def _full_rank(rows: Floats, kept: Bools) -> bool:
    """Whether the kept observations fix every coefficient and leave one over to judge them by."""
    width = rows.shape[1]
    return bool(np.count_nonzero(kept) > width and np.linalg.matrix_rank(rows[kept]) == width)


def _least_squares(rows: Floats, target: Floats, kept: Bools) -> Floats:
    return np.asarray(np.linalg.lstsq(rows[kept], target[kept], rcond=None)[0], dtype=np.float64)


def _residual_scale(residuals: Floats, kept: Bools, width: int) -> float:
    """Root of the squared residuals per degree of freedom; zero when there is none left."""
    freedom = int(np.count_nonzero(kept)) - width
    return float(np.sqrt(np.sum(residuals[kept] ** 2) / freedom)) if freedom > 0 else 0.0


def _small_sample(freedom: int) -> float:
    """The factor by which scales of few residuals come out too small: Rousseeuw and Leroy (1987), from memory."""
    return 1.0 + 5.0 / freedom


def _truncated_deviation(cutoff: float) -> float:
    """Standard deviation of a standard normal cut off at +-``cutoff``: what the scale of kept residuals lacks."""
    density = math.exp(-0.5 * cutoff * cutoff) / math.sqrt(2.0 * math.pi)
    return math.sqrt(1.0 - 2.0 * cutoff * density / math.erf(cutoff / math.sqrt(2.0)))


def _trimmed_start(rows: Floats, target: Floats) -> Floats:
    """Least trimmed squares: best elemental line, then concentration steps."""
    count, width = rows.shape
    half = count // 2 + 1
    lines = _elemental_lines(rows, target)
    squares = (target[None, :] - lines @ rows.T) ** 2
    trimmed = np.partition(squares, half - 1, axis=1)[:, :half].sum(axis=1)
    line: Floats = lines[int(np.argmin(trimmed))]
    chosen = np.zeros(count, dtype=np.bool_)
    for _ in range(_STEPS):
        nearest = np.argsort(np.abs(target - rows @ line), kind="stable")[:half]
        again = np.zeros(count, dtype=np.bool_)
        again[nearest] = True
        if np.array_equal(again, chosen):
            break
        chosen = again
        if int(np.linalg.matrix_rank(rows[chosen])) < width:
            break
        line = _least_squares(rows, target, chosen)
    return line


def _elemental_lines(rows: Floats, target: Floats) -> Floats:
    """Coefficients (m, p) of the lines through single observations (p = 1) or pairs of them (p = 2)."""
    count, width = rows.shape
    if width == 1:
        through = rows[:, 0] != 0.0
        return np.asarray(target[through] / rows[through, 0], dtype=np.float64)[:, None]
    first, second = _index_pairs(count)
    determinant = rows[first, 0] * rows[second, 1] - rows[first, 1] * rows[second, 0]
    sound = determinant != 0.0
    first, second, determinant = first[sound], second[sound], determinant[sound]
    one = (target[first] * rows[second, 1] - rows[first, 1] * target[second]) / determinant
    two = (rows[first, 0] * target[second] - target[first] * rows[second, 0]) / determinant
    return np.column_stack([one, two])


def _index_pairs(count: int) -> tuple[Ints, Ints]:
    """All pairs when they are few, else a fixed draw of them."""
    if count * (count - 1) // 2 <= _CANDIDATES:
        first, second = np.triu_indices(count, k=1)
        return first.astype(np.int64), second.astype(np.int64)
    draws = min(_CANDIDATES, max(_LEAST_CANDIDATES, _PRODUCTS // count))
    generator = np.random.default_rng(_SEED)
    first = generator.integers(0, count, draws)
    second = (first + generator.integers(1, count, draws)) % count
    return first, second
