"""Model x transform x Black: whole smiles. The composer that everything above calls.

A slice is one expiry: forward, discount factor, strikes in any order with repeats, a payoff per strike.
Out-of-the-money values come from the transform (or, for Black's model, from Black's formula); in-the-money ones
follow by put-call parity, which therefore holds exactly; digital prices come from the same contours. Implied
volatilities are always those of the out-of-the-money vanilla at the strike, digitals included.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import ndtr

from engine.arrays import Bytes, Floats
from engine.black import otm_value, total_deviation
from engine.errors import InputError
from engine.models.black import Black
from engine.moneyness import log_moneyness
from engine.protocols import Model
from engine.slices import Batch, Slice, side_by_side
from engine.status import Payoff, Status
from engine.transform.inversion import Contour, invert
from engine.transform.kernels import DIGITAL, VANILLA, Kernel
from engine.transform.reach import Strikes

__all__ = ["PricedSlice", "TransformReport", "price_smiles"]

TOLERANCE_RANGE = (1e-14, 1e-2)
NODE_LIMIT = 4_000_000
_EPS = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, slots=True)
class TransformReport:
    """How a slice was priced: ``method`` (``closed_form``, ``contour_fft``, ``deformed_contour`` or the last two
    joined by ``+``), the exponents ``p`` of its rows, and the nodes in all."""

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

    ``tolerance`` is relative to the out-of-the-money value, within ``TOLERANCE_RANGE``. Accuracy: the stated bound
    covers the error. Raises InputError (argument, index, allowed range) for inputs outside the admissible ranges, and
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
    batch = side_by_side(slices)
    k = log_moneyness(batch.strikes, batch.forward[batch.slice_of])
    digital = bool(np.any(batch.payoffs >= Payoff.DIGITAL_CALL))
    otm = _values(per_slice, batch, k, tolerance, digital, node_limit)
    return _answers(batch, k, otm, tolerance, implied_vols)


def _values(models: list[Model], batch: Batch, k: Floats, tolerance: float, digital: bool, node_limit: int) -> _Otm:
    """Out-of-the-money values, one batch per kind of model."""
    n = k.shape[0]
    kernels = [VANILLA, DIGITAL] if digital else [VANILLA]
    value, bound = np.zeros((len(kernels), n)), np.zeros((len(kernels), n))
    reports: list[Any] = [None] * len(models)
    kinds: dict[Any, list[int]] = {}
    for i, model in enumerate(models):
        kinds.setdefault(type(model), []).append(i)
    for kind, members in kinds.items():
        index = np.array(members)
        stacked = kind.stack([models[i] for i in members])
        variance = np.reshape(stacked.mean_variance(batch.expiry[index][:, None]), -1)
        closed = (variance == 0.0) | (kind is Black)
        if closed.any():
            mine = index[closed]
            at, s = batch.points(mine), np.sqrt(variance[closed])
            value[:, at], bound[:, at] = _closed_form(kernels, k[at], np.repeat(s, batch.lengths[mine]))
            for i in mine:
                reports[i] = TransformReport("closed_form", (), 0)
        if not closed.all():
            mine = index[~closed]
            at = batch.points(mine)
            lengths = batch.lengths[mine]
            strikes = Strikes(k[at], np.repeat(np.arange(mine.shape[0]), lengths), np.cumsum(lengths) - lengths)
            found = invert(
                stacked.take(np.flatnonzero(~closed)) if closed.any() else stacked,
                batch.expiry[mine][:, None],
                strikes,
                tolerance=tolerance,
                kernels=kernels,
                limit=node_limit,
            )
            value[:, at], bound[:, at] = found.value, found.bound
            for i, contour in zip(mine, found.contours, strict=True):
                reports[i] = _report(contour)
    return _Otm(value[0], bound[0], value[-1], bound[-1], reports)


def _report(contour: Contour) -> TransformReport:
    words = [w for w, on in (("contour_fft", not contour.bent.all()), ("deformed_contour", contour.bent.any())) if on]
    return TransformReport("+".join(words), tuple(contour.exponents.tolist()), int(contour.nodes.sum()))


def _closed_form(kernels: list[Kernel], k: Floats, s: Floats) -> tuple[Floats, Floats]:
    """Black's formula and its rounding bound: the value's condition in ``k`` and ``s`` times a few units. (K, n)
    each."""
    with np.errstate(divide="ignore", invalid="ignore"):
        d = -np.abs(k) / s
        d2 = np.where(s > 0.0, d - 0.5 * np.sign(k + (k == 0.0)) * s, -np.inf)
    steep = np.where(s > 0.0, d * d + 0.25 * s * s, 0.0)
    value = np.stack([otm_value(k, s), ndtr(d2)][: len(kernels)])
    units = np.stack([16.0 + 8.0 * steep, 16.0 + 8.0 * (steep + np.abs(k))][: len(kernels)])
    return value, value * _EPS * units + np.finfo(np.float64).tiny


def _answers(batch: Batch, k: Floats, otm: _Otm, tolerance: float, implied_vols: bool) -> list[PricedSlice]:
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
        PricedSlice(prices[a:b], bounds[a:b], vols[a:b], statuses[a:b], resolved[a:b], report)
        for a, b, report in zip(batch.starts, ends, otm.reports, strict=True)
    ]
