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

from engine.arrays import EPS, Bytes, Floats
from engine.black import total_deviation
from engine.errors import InputError
from engine.moneyness import log_moneyness
from engine.protocols import Model
from engine.slices import Batch, Slice, side_by_side
from engine.status import Payoff, Status
from engine.transform.inversion import Contour
from engine.transform.kernels import DIGITAL, VANILLA
from engine.values import Group, kernel_values

__all__ = [
    "TOLERANCE_RANGE",
    "PricedSlice",
    "Sides",
    "TransformReport",
    "assemble_prices",
    "check_models",
    "price_smiles",
    "sides_of",
]

TOLERANCE_RANGE = (1e-14, 1e-2)
NODE_LIMIT = 4_000_000
_CALL, _PUT, _OTM, _DIGITAL_CALL = (int(p) for p in (Payoff.CALL, Payoff.PUT, Payoff.OTM, Payoff.DIGITAL_CALL))
_OK, _TOLERANCE_NOT_MET = int(Status.OK), int(Status.TOLERANCE_NOT_MET)


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
    per_slice = check_models(models, len(slices), tolerance)
    batch = side_by_side(slices)
    k = log_moneyness(batch.strikes, batch.forward[batch.slice_of])
    kernels = [VANILLA, DIGITAL] if bool((batch.payoffs >= _DIGITAL_CALL).any()) else [VANILLA]
    groups = kernel_values(
        per_slice, batch, k, kernels_of=lambda _: kernels, tolerance=tolerance, node_limit=node_limit
    )
    return assemble_prices(batch, k, groups, tolerance=tolerance, implied_vols=implied_vols)


def check_models(models: Model | Sequence[Model], count: int, tolerance: float) -> list[Model]:
    """One checked model per slice; raises InputError for a tolerance, a count or a parameter out of range."""
    if not TOLERANCE_RANGE[0] <= tolerance <= TOLERANCE_RANGE[1]:
        raise InputError("tolerance", f"is {tolerance!r}", allowed=f"{TOLERANCE_RANGE[0]:g} to {TOLERANCE_RANGE[1]:g}")
    if count == 0:
        raise InputError("slices", "is empty", allowed="at least one slice")
    per_slice = list(models) if isinstance(models, Sequence) else [models] * count
    if len(per_slice) != count:
        raise InputError("models", f"has {len(per_slice)} models", allowed=f"one or {count}")
    for model in {id(m): m for m in per_slice}.values():
        model.check()
    return per_slice


def _report(contour: Contour | None) -> TransformReport:
    if contour is None:
        return TransformReport("closed_form", (), 0)
    bent = contour.bent.tolist()
    words = [word for word, on in (("contour_fft", not all(bent)), ("deformed_contour", any(bent))) if on]
    return TransformReport("+".join(words), tuple(contour.exponents.tolist()), sum(contour.nodes.tolist()))


def assemble_prices(
    batch: Batch, k: Floats, groups: Sequence[Group], *, tolerance: float, implied_vols: bool
) -> list[PricedSlice]:
    """Forward, discounting, parity, digitals and implied volatilities put back; columns cut into slices again.

    The kernels of every group begin with the vanilla; a digital, where payoffs ask for one, is among them.
    """
    value, bound = np.empty(k.shape), np.empty(k.shape)
    sides = sides_of(batch)
    p_value, p_bound = np.zeros(k.shape), np.zeros(k.shape)
    reports: dict[int, TransformReport] = {}
    for group in groups:
        value[group.at], bound[group.at] = group.value[0], group.bound[0]
        if DIGITAL in group.kernels:
            row = group.kernels.index(DIGITAL)
            p_value[group.at], p_bound[group.at] = group.value[row], group.bound[row]
        reports.update({int(i): _report(c) for i, c in zip(group.members, group.contours, strict=True)})
    forward, discount = batch.forward[batch.slice_of], batch.discount[batch.slice_of]
    intrinsic = np.where(sides.in_money, np.abs(forward - batch.strikes), 0.0)
    probability = np.where(sides.in_money, 1.0 - p_value, p_value)
    prices = discount * np.where(sides.digital, probability, value * forward + intrinsic)
    bounds = discount * np.where(sides.digital, p_bound, bound * forward) + 4.0 * EPS * prices
    statuses = np.zeros(k.shape, dtype=np.uint8)
    vols = np.full(k.shape, np.nan)
    if implied_vols:
        found = total_deviation(k, value)
        vols = found.deviations / np.sqrt(batch.expiry[batch.slice_of])
        statuses = found.statuses.copy()
    own, own_bound = np.where(sides.digital, p_value, value), np.where(sides.digital, p_bound, bound)
    statuses[(own_bound > tolerance * own) & (statuses == _OK)] = _TOLERANCE_NOT_MET
    ends = [*batch.starts[1:].tolist(), batch.strikes.shape[0]]
    return [
        PricedSlice(prices[a:b], bounds[a:b], vols[a:b], statuses[a:b], sides.payoffs[a:b], reports[i])
        for i, (a, b) in enumerate(zip(batch.starts.tolist(), ends, strict=True))
    ]


@dataclass(frozen=True, slots=True)
class Sides:
    """Per strike: payoffs with ``OTM`` resolved (uint8), and whether each is a call, a digital, in the money."""

    payoffs: Bytes
    call: Any
    digital: Any
    in_money: Any


def sides_of(batch: Batch) -> Sides:
    """What each payoff is at its strike; the call side begins at the forward itself."""
    otm_call = batch.strikes >= batch.forward[batch.slice_of]
    payoffs = np.where(batch.payoffs == _OTM, np.where(otm_call, _CALL, _PUT), batch.payoffs).astype(np.uint8)
    call = (payoffs == _CALL) | (payoffs == _DIGITAL_CALL)
    return Sides(payoffs, call, payoffs >= _DIGITAL_CALL, call != otm_call)
