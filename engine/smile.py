"""Model x transform x Black: whole smiles. The composer that everything above calls.

A slice is one expiry: forward, discount factor, strikes in any order with repeats, a payoff per strike. Out-of-the-money
values come from the transform (or, for Black's model, from Black's formula); in-the-money ones follow by put-call
parity, which therefore holds exactly; digital prices come from the same contours. Implied volatilities are always
those of the out-of-the-money vanilla at the strike, digitals included.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Sequence

import numpy as np

from engine.arrays import Bytes, Floats, Ints
from engine.black import otm_value, total_deviation
from engine.errors import InputError
from engine.models.black import Black
from engine.moneyness import log_moneyness
from engine.protocols import Model
from engine.status import Payoff, Status
from engine.transform.inversion import invert
from engine.transform.plan import Strikes

__all__ = ["EXPIRY_RANGE", "PricedSlice", "Slice", "TransformReport", "price_smiles"]

EXPIRY_RANGE = (1.0 / (365.0 * 24.0), 50.0)  # years: one hour to fifty years, the range the engine is tested over
TOLERANCE_RANGE = (1e-14, 1e-2)
NODE_LIMIT = 4_000_000
_EPS = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, slots=True)
class Slice:
    """One expiry. ``expiry`` in years; ``forward`` and ``discount_factor`` > 0; ``strikes`` float64 (n,) > 0 in the
    unit of the forward; ``payoffs`` uint8 (n,) codes of ``Payoff``."""

    expiry: float
    forward: float
    discount_factor: float
    strikes: Floats
    payoffs: Bytes


@dataclass(frozen=True, slots=True)
class TransformReport:
    """How a slice was priced: ``method`` (``closed_form``, ``contour_fft``, ``deformed_contour`` or the last two joined by
    ``+``), the exponents ``p`` of its rows, and the nodes in all."""

    method: str
    exponents: tuple[float, ...]
    nodes: int


@dataclass(frozen=True, slots=True)
class PricedSlice:
    """Columns in the order of the strikes sent, shape (n,). ``error_bounds`` are absolute, in price units, for the
    prices as returned; ``implied_vols`` is NaN where ``statuses`` says why."""

    prices: Floats
    error_bounds: Floats
    implied_vols: Floats
    statuses: Bytes
    payoffs: Bytes
    transform: TransformReport


@dataclass(frozen=True, slots=True)
class _Batch:
    """All slices side by side: ragged columns (n,) and per-slice columns (S,)."""

    strikes: Floats
    payoffs: Bytes
    slice_of: Ints
    starts: Ints
    expiry: Floats
    forward: Floats
    discount: Floats


@dataclass(frozen=True, slots=True)
class _Otm:
    """Out-of-the-money values per unit forward and probabilities with bounds, (n,), and a report per slice."""

    value: Floats
    bound: Floats
    digital: Floats
    digital_bound: Floats
    reports: list[TransformReport]


def price_smiles(
    models: Model | Sequence[Model],
    slices: Sequence[Slice],
    *,
    tolerance: float = 1e-10,
    node_limit: int = NODE_LIMIT,
    implied_vols: bool = True,
) -> list[PricedSlice]:
    """Price whole smiles, one model for all slices or one per slice, in one batch.

    ``tolerance`` is relative to the out-of-the-money value, within ``TOLERANCE_RANGE``. Accuracy: the stated bound covers
    the error. Raises InputError (argument, index, allowed range) for inputs outside the admissible ranges, and
    RefusedError when the batch would need more than ``node_limit`` transform nodes.
    """
    if not TOLERANCE_RANGE[0] <= tolerance <= TOLERANCE_RANGE[1]:
        raise InputError("tolerance", f"is {tolerance!r}", allowed=f"{TOLERANCE_RANGE[0]:g} to {TOLERANCE_RANGE[1]:g}")
    if not slices:
        raise InputError("slices", "is empty", allowed="at least one slice")
    per_slice = list(models) if isinstance(models, Sequence) else [models] * len(slices)
    if len(per_slice) != len(slices):
        raise InputError("models", f"has {len(per_slice)} models", allowed=f"one or {len(slices)}")
    for model in {id(m): m for m in per_slice}.values():
        model.check()
    batch = _side_by_side(slices)
    k = log_moneyness(batch.strikes, batch.forward[batch.slice_of])
    digital = bool(np.any(batch.payoffs >= Payoff.DIGITAL_CALL))
    otm = _values(per_slice, batch, k, tolerance, digital, node_limit)
    return _answers(batch, k, otm, tolerance, implied_vols)


def _side_by_side(slices: Sequence[Slice]) -> _Batch:
    """Check every slice and lay the columns end to end."""
    for i, s in enumerate(slices):
        for name, value, low, high in (
            ("expiry", s.expiry, *EXPIRY_RANGE),
            ("forward", s.forward, 1e-12, 1e15),
            ("discount_factor", s.discount_factor, 1e-12, 1e3),
        ):
            if not low <= value <= high:
                raise InputError(f"slices.{name}", f"is {value!r}", index=(i,), allowed=f"{low:g} to {high:g}")
        if s.strikes.ndim != 1 or s.strikes.shape[0] == 0:
            raise InputError("slices.strikes", "is empty", index=(i,), allowed="at least one strike")
        bad = np.flatnonzero(~((s.strikes > 0.0) & np.isfinite(s.strikes)))
        if bad.size:
            at = int(bad[0])
            raise InputError(
                "slices.strikes", f"is {float(s.strikes[at])!r}", index=(i, at), allowed="finite and above 0"
            )
        if s.payoffs.shape != s.strikes.shape:
            raise InputError("slices.payoffs", "has another length than strikes", index=(i,), allowed="one per strike")
    lengths = np.array([s.strikes.shape[0] for s in slices])
    return _Batch(
        np.concatenate([s.strikes for s in slices]),
        np.concatenate([s.payoffs for s in slices]),
        np.repeat(np.arange(len(slices)), lengths),
        np.concatenate([[0], np.cumsum(lengths)[:-1]]),
        np.array([s.expiry for s in slices]),
        np.array([s.forward for s in slices]),
        np.array([s.discount_factor for s in slices]),
    )


def _values(
    models: list[Model], batch: _Batch, k: Floats, tolerance: float, digital: bool, node_limit: int
) -> _Otm:
    """Out-of-the-money values, one batch per kind of model."""
    n = k.shape[0]
    value, bound, p_value, p_bound = (np.zeros(n) for _ in range(4))
    reports: list[Any] = [None] * len(models)
    kinds: dict[Any, list[int]] = {}
    for i, model in enumerate(models):
        kinds.setdefault(type(model), []).append(i)
    for kind, members in kinds.items():
        index = np.array(members)
        stacked = kind.stack([models[i] for i in members])
        tau = batch.expiry[index][:, None]
        variance = np.reshape(stacked.mean_variance(tau), -1)
        closed = np.full(index.shape, kind is Black) | (variance == 0.0)
        if np.any(closed):
            mine = index[closed]
            at, s = _points(batch, mine), np.sqrt(variance[closed])
            found = _closed_form(k[at], np.repeat(s, _lengths(batch)[mine]))
            value[at], bound[at], p_value[at], p_bound[at] = found
            for i in mine:
                reports[i] = TransformReport("closed_form", (), 0)
        if not np.all(closed):
            mine = index[~closed]
            at = _points(batch, mine)
            lengths = _lengths(batch)[mine]
            strikes = Strikes(
                k[at], np.repeat(np.arange(mine.shape[0]), lengths), np.concatenate([[0], np.cumsum(lengths)[:-1]])
            )
            open_model = stacked.take(np.flatnonzero(~closed))
            found_t = invert(open_model, tau[~closed], strikes, tolerance=tolerance, digital=digital, limit=node_limit)
            value[at], bound[at] = found_t.vanilla.value, found_t.vanilla.bound
            if found_t.digital is not None:
                p_value[at], p_bound[at] = found_t.digital.value, found_t.digital.bound
            for local, i in enumerate(mine):
                rows = np.flatnonzero(found_t.plan.slice_of == local)
                reports[i] = _report(found_t.plan.nodes[rows], found_t.nodes[rows], found_t.plan.exponent[rows])
    return _Otm(value, bound, p_value, p_bound, reports)


def _report(planned: Ints, used: Ints, exponents: Floats) -> TransformReport:
    words = [w for w, on in (("contour_fft", np.any(planned > 0)), ("deformed_contour", np.any(planned == 0))) if on]
    return TransformReport("+".join(words), tuple(float(p) for p in exponents), int(used.sum()))


def _lengths(batch: _Batch) -> Ints:
    return np.diff(np.append(batch.starts, batch.strikes.shape[0]))


def _points(batch: _Batch, members: Ints) -> Ints:
    """Positions of the strikes of the given slices, in order."""
    if members.shape[0] == batch.starts.shape[0]:
        return np.arange(batch.strikes.shape[0])
    lengths = _lengths(batch)
    return np.concatenate([np.arange(batch.starts[i], batch.starts[i] + lengths[i]) for i in members])


def _closed_form(k: Floats, s: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Black's formula and its rounding bound: the value's condition in ``k`` and ``s`` times a few units."""
    from scipy.special import ndtr

    value = otm_value(k, s)
    with np.errstate(divide="ignore", invalid="ignore"):
        d = -np.abs(k) / s
        d2 = np.where(s > 0.0, d - 0.5 * np.sign(k + (k == 0.0)) * s, -np.inf)
        d2 = np.where((s == 0.0) & (k == 0.0), -np.inf, d2)
        digital = ndtr(d2)
    steep = np.where(s > 0.0, d * d + 0.25 * s * s, 0.0)
    bound = value * _EPS * (16.0 + 8.0 * steep) + np.finfo(np.float64).tiny
    digital_bound = digital * _EPS * (16.0 + 8.0 * (steep + np.abs(k))) + np.finfo(np.float64).tiny
    return value, bound, digital, digital_bound


def _answers(batch: _Batch, k: Floats, otm: _Otm, tolerance: float, implied_vols: bool) -> list[PricedSlice]:
    """Forward, discounting, parity, digitals and implied volatilities put back; columns cut into slices again."""
    forward = batch.forward[batch.slice_of]
    discount = batch.discount[batch.slice_of]
    otm_call = batch.strikes >= forward
    resolved = np.where(batch.payoffs == Payoff.OTM, np.where(otm_call, Payoff.CALL, Payoff.PUT), batch.payoffs)
    is_call = (resolved == Payoff.CALL) | (resolved == Payoff.DIGITAL_CALL)
    is_digital = resolved >= Payoff.DIGITAL_CALL
    in_money = is_call != otm_call
    intrinsic = np.where(in_money, np.abs(forward - batch.strikes), 0.0)
    vanilla = otm.value * forward + intrinsic
    vanilla_bound = otm.bound * forward
    probability = np.where(in_money, 1.0 - otm.digital, otm.digital)
    prices = discount * np.where(is_digital, probability, vanilla)
    bounds = discount * np.where(is_digital, otm.digital_bound, vanilla_bound) + 4.0 * _EPS * prices
    statuses = np.zeros(k.shape, dtype=np.uint8)
    vols = np.full(k.shape, np.nan)
    if implied_vols:
        found = total_deviation(k, otm.value)
        vols = found.deviations / np.sqrt(batch.expiry[batch.slice_of])
        statuses = found.statuses.copy()
    own = np.where(is_digital, otm.digital, otm.value)
    own_bound = np.where(is_digital, otm.digital_bound, otm.bound)
    missed = (own_bound > tolerance * own) & (statuses == Status.OK)
    statuses[missed] = Status.TOLERANCE_NOT_MET
    ends = np.append(batch.starts[1:], batch.strikes.shape[0])
    resolved = resolved.astype(np.uint8)
    return [
        PricedSlice(
            prices[a:b], bounds[a:b], vols[a:b], statuses[a:b], resolved[a:b], report
        )
        for a, b, report in zip(batch.starts, ends, otm.reports, strict=True)
    ]
