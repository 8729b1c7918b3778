"""Every Greek and sensitivity of whole smiles, by factors on the same transform.

With ``V = D F c(k, tau)`` for a vanilla (``k = ln(K/F)``, ``c`` undiscounted per unit forward) and ``V = D P(k,
tau)`` for a digital, strike homogeneity turns derivatives in the forward into values of other kernels:

    vanilla    dV/dF = D E[e^X; X > k] (call), that less D (put)      d2V/dF2 = D e^k f(k) / F
    digital    dV/dF = +- D f(k) / F                                  d2V/dF2 = -+ D (f(k) + f'(k)) / F^2

With a spot ``S`` in the slice, ``F = S exp((r - y) tau)``: ``dV/dS = dV/dF F / S`` and ``d2V/dS2 = d2V/dF2 (F / S)^2``;
``r = -ln D / tau`` and ``r - y = ln(F / S) / tau``; without one, the forward takes the spot's place and ``r - y =
0``. Then

    theta = -dV/dtau = r V - (r - y) F dV/dF - D F dc/dtau            rho = dV/dr = tau (F dV/dF - V)
    minimum-variance delta = delta + sum_i w_i rho_i sigma_i dV/dv_i / S

with ``w_i`` the share of factor i in the instantaneous variance: the hedge ratio that minimises the variance of the
diffusive part (common practice, no source). ``vega``, ``vanna``, ``volga``, ``black_delta`` and ``black_gamma`` are
Black's at the model's own implied volatility. Derivatives by parameters and by ``tau`` come from the model's analytic
gradient.

Bounds. Those of the kernels go through the same linear combinations; Black quantities carry the error of the implied
volatility: ``|d Greek / d vol| (price bound) / vega`` to first order, which is an estimate where that change is not
small.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import EPS, Floats
from engine.errors import InputError
from engine.greek_kernels import KernelTable, black_columns, kernels_for
from engine.moneyness import log_moneyness
from engine.protocols import Model
from engine.slices import Batch, Slice, side_by_side
from engine.smile import NODE_LIMIT, PricedSlice, Sides, assemble_prices, check_models, sides_of
from engine.values import Group, kernel_values

__all__ = ["GREEKS", "GreekSlice", "price_greeks"]

GREEKS = (
    "delta",
    "gamma",
    "minimum_variance_delta",
    "theta",
    "rho",
    "vega",
    "vanna",
    "volga",
    "black_delta",
    "black_gamma",
)
_BLACK = ("vega", "vanna", "volga", "black_delta", "black_gamma")


@dataclass(frozen=True, slots=True)
class GreekSlice:
    """Columns in the order of the strikes: the prices; Greeks and sensitivities by name with absolute error bounds
    (infinite, and the value NaN, where there is none). ``with_respect_to``: ``spot`` or ``forward``, for delta and
    gamma."""

    priced: PricedSlice
    greeks: dict[str, Floats]
    greek_bounds: dict[str, Floats]
    sensitivities: dict[str, Floats]
    sensitivity_bounds: dict[str, Floats]
    with_respect_to: str


@dataclass(frozen=True, slots=True)
class _Column:
    """A number per strike of one group and a bound on its error."""

    value: Floats
    bound: Floats


@dataclass(frozen=True, slots=True)
class _Terms:
    """What every Greek of a group is made from, per strike (n,)."""

    k: Floats
    strike: Floats
    forward: Floats
    base: Floats  # spot where given, else forward
    discount: Floats
    tau: Floats
    carry: Floats
    sides: Sides
    price: _Column
    table: KernelTable


def price_greeks(
    models: Model | Sequence[Model],
    slices: Sequence[Slice],
    *,
    greeks: Sequence[str] = ("delta", "gamma"),
    sensitivities: bool = False,
    tolerance: float = 1e-10,
    node_limit: int = NODE_LIMIT,
) -> list[GreekSlice]:
    """Prices with Greeks and, if asked, derivatives by every model parameter, in one batch.

    ``greeks``: names from ``GREEKS``; units: per unit of spot or forward, of rate, of volatility (1.00) and of year.
    ``tolerance`` is relative to the out-of-the-money price; Greeks come with bounds of their own. Raises InputError
    for an unknown name, for ``minimum_variance_delta`` under a model without a variance factor, and as
    ``price_smiles`` does.
    """
    for i, name in enumerate(greeks):
        if name not in GREEKS:
            raise InputError("greeks", f"is {name!r}", index=(i,), allowed=", ".join(GREEKS))
    per_slice = check_models(models, len(slices), tolerance)
    wanted = tuple(dict.fromkeys(greeks))
    if "minimum_variance_delta" in wanted:
        for model in per_slice:
            if not model.variance_weights():
                raise InputError(
                    "greeks",
                    f"has minimum_variance_delta, but {model.name} has no variance factor",
                    index=(list(greeks).index("minimum_variance_delta"),),
                    allowed=", ".join(name for name in GREEKS if name != "minimum_variance_delta"),
                )
    batch = side_by_side(slices)
    k = log_moneyness(batch.strikes, batch.forward[batch.slice_of])
    sides = sides_of(batch)
    vanilla, digital = bool((~sides.digital).any()), bool(sides.digital.any())
    groups = kernel_values(
        per_slice,
        batch,
        k,
        kernels_of=lambda kind: kernels_for(kind, wanted, sensitivities, vanilla=vanilla, digital=digital),
        tolerance=tolerance,
        node_limit=node_limit,
    )
    priced = assemble_prices(batch, k, groups, tolerance=tolerance, implied_vols=True)
    spots = np.array([np.nan if s.spot is None else s.spot for s in slices])
    out: list[GreekSlice | None] = [None] * len(slices)
    for group in groups:
        _fill(out, group, batch, k, sides, priced, spots, wanted, sensitivities)
    return [one for one in out if one is not None]


def _fill(
    out: list[GreekSlice | None], group: Group, batch: Batch, k: Floats, sides: Sides, priced: list[PricedSlice],
    spots: Floats, wanted: tuple[str, ...], sensitivities: bool,
) -> None:  # fmt: skip
    """Columns of one group, cut into its slices."""
    terms = _terms(group, batch, k, sides, priced, spots)
    columns = _greeks(group, terms, wanted)
    if any(name in _BLACK for name in wanted):
        vols = np.concatenate([priced[i].implied_vols for i in group.members])
        columns |= _black(terms, vols, wanted)
    names = group.model.sensitivity_names if sensitivities else ()
    slopes = {name: _by_parameter(terms, i) for i, name in enumerate(names)}
    ends = np.cumsum(batch.lengths[group.members])
    for i, b in zip(group.members, ends, strict=True):
        part = slice(int(b - batch.lengths[i]), int(b))
        out[i] = GreekSlice(
            priced[i],
            {name: column.value[part] for name, column in columns.items()},
            {name: column.bound[part] for name, column in columns.items()},
            {name: column.value[part] for name, column in slopes.items()},
            {name: column.bound[part] for name, column in slopes.items()},
            "forward" if np.isnan(spots[i]) else "spot",
        )


def _terms(group: Group, batch: Batch, k: Floats, sides: Sides, priced: list[PricedSlice], spots: Floats) -> _Terms:
    at = group.at
    owner = batch.slice_of[at]
    forward, discount, tau, spot = batch.forward[owner], batch.discount[owner], batch.expiry[owner], spots[owner]
    known = ~np.isnan(spot)
    base = np.where(known, spot, forward)
    return _Terms(
        k[at],
        batch.strikes[at],
        forward,
        base,
        discount,
        tau,
        np.where(known, np.log(forward / base) / tau, 0.0),
        Sides(sides.payoffs[at], sides.call[at], sides.digital[at], sides.in_money[at]),
        _Column(
            np.concatenate([priced[i].prices for i in group.members]),
            np.concatenate([priced[i].error_bounds for i in group.members]),
        ),
        KernelTable(group.kernels, group.value, group.bound),
    )


def _greeks(group: Group, t: _Terms, wanted: tuple[str, ...]) -> dict[str, _Column]:
    """The model's own Greeks."""
    out: dict[str, _Column] = {}
    if not set(wanted) - set(_BLACK):
        return out
    by_forward = _by_forward(t) if {"delta", "minimum_variance_delta", "theta", "rho"} & set(wanted) else None
    for name in wanted:
        if name == "gamma":
            out[name] = _scaled(_second_by_forward(t), (t.forward / t.base) ** 2)
        elif name in _BLACK or by_forward is None:
            continue
        elif name == "delta":
            out[name] = _scaled(by_forward, t.forward / t.base)
        elif name == "minimum_variance_delta":
            out[name] = _minimum_variance(group, t, by_forward)
        elif name == "theta":
            out[name] = _theta(group, t, by_forward)
        else:
            out[name] = _sum((by_forward, t.tau * t.forward), (t.price, -t.tau))
    return {name: out[name] for name in wanted if name in out}


def _sum(*terms: tuple[_Column, Any]) -> _Column:
    """A linear combination, its bound and the rounding of the sum."""
    parts = [column.value * factor for column, factor in terms]
    bound = sum(column.bound * np.abs(factor) for column, factor in terms)
    rounding = 4.0 * EPS * np.sum(np.abs(parts), axis=0)
    return _Column(np.sum(parts, axis=0), np.asarray(bound + rounding))


def _scaled(column: _Column, factor: Any) -> _Column:
    return _sum((column, factor))


def _by_forward(t: _Terms) -> _Column:
    """``dV/dF``."""
    sign = np.where(t.sides.call, 1.0, -1.0)
    value, bound = np.zeros(t.k.shape), np.zeros(t.k.shape)
    plain = ~t.sides.digital
    if plain.any():
        share, share_bound = t.table.share_digital
        delta = np.where(t.sides.in_money, 1.0 - share, share) * sign
        value[plain], bound[plain] = (t.discount * delta)[plain], (t.discount * share_bound)[plain]
    if not plain.all():
        density, density_bound = t.table.density
        value[~plain] = (sign * t.discount * density / t.forward)[~plain]
        bound[~plain] = (t.discount * density_bound / t.forward)[~plain]
    return _Column(value, bound + 4.0 * EPS * np.abs(value))


def _second_by_forward(t: _Terms) -> _Column:
    """``d2V/dF2``."""
    density = _Column(*t.table.density)
    vanilla = _scaled(density, t.discount * t.strike / t.forward**2)
    if not t.sides.digital.any():
        return vanilla
    sign = np.where(t.sides.call, -1.0, 1.0) * t.discount / t.forward**2
    digital = _sum((density, sign), (_Column(*t.table.density_slope), sign))
    return _Column(
        np.where(t.sides.digital, digital.value, vanilla.value), np.where(t.sides.digital, digital.bound, vanilla.bound)
    )


def _by_parameter(t: _Terms, index: int) -> _Column:
    """``dV/d(parameter)`` at fixed forward and discount factor; the last index is ``tau``."""
    value, bound = t.table.by_parameter(index, digital=False) if not t.sides.digital.all() else (t.k * 0.0, t.k * 0.0)
    value, bound = value * t.discount * t.forward, bound * t.discount * t.forward
    if t.sides.digital.any():
        slope, slope_bound = t.table.by_parameter(index, digital=True)
        sign = np.where(t.sides.call, 1.0, -1.0)
        value = np.where(t.sides.digital, sign * t.discount * slope, value)
        bound = np.where(t.sides.digital, t.discount * slope_bound, bound)
    lost = ~np.isfinite(bound)
    return _Column(np.where(lost, np.nan, value), bound + 4.0 * EPS * np.abs(value))


def _theta(group: Group, t: _Terms, by_forward: _Column) -> _Column:
    rate = -np.log(t.discount) / t.tau
    by_tau = _by_parameter(t, len(group.model.sensitivity_names))
    found = _sum((t.price, rate), (by_forward, -t.carry * t.forward), (by_tau, -1.0))
    # the rates are quotients of logarithms by tau: rounding of the discount factor and of the forward is divided by it
    rates = 4.0 * EPS / t.tau * (np.abs(t.price.value) + np.abs(by_forward.value * t.forward))
    return _Column(found.value, found.bound + rates)


def _minimum_variance(group: Group, t: _Terms, by_forward: _Column) -> _Column:
    terms: list[tuple[_Column, Any]] = [(by_forward, t.forward / t.base)]
    for index, weight in group.model.variance_weights():
        per_strike = np.repeat(np.broadcast_to(np.ravel(weight), group.members.shape), group.lengths)
        terms.append((_by_parameter(t, index), per_strike / t.base))
    return _sum(*terms)


def _black(t: _Terms, vols: Floats, wanted: tuple[str, ...]) -> dict[str, _Column]:
    """Black quantities at the model's own implied volatility, times what they are short of a price's Greek."""
    found = black_columns(t.k, vols, t.tau, call=t.sides.call, digital=t.sides.digital)
    step = t.forward / t.base
    unit = np.where(t.sides.digital, 1.0 / t.forward, 1.0)  # a digital pays money, not shares
    scale = {
        "vega": t.discount * t.forward * unit,
        "vanna": t.discount * unit * step,
        "volga": t.discount * t.forward * unit,
        "black_delta": t.discount * unit * step,
        "black_gamma": t.discount / t.forward * unit * step**2,
    }
    vega = found.vanilla_vega * t.discount * t.forward
    with np.errstate(divide="ignore", invalid="ignore"):
        vol_error = (
            np.where(vega > 0.0, t.table.vanilla_bound * t.discount * t.forward / vega, np.inf) + 8.0 * EPS * vols
        )
    out = {}
    for name in (name for name in wanted if name in _BLACK):
        value = found.columns[name] * scale[name]
        with np.errstate(invalid="ignore"):
            bound = np.abs(found.slopes[name] * scale[name]) * vol_error + 64.0 * EPS * np.abs(value) * found.steepness
        lost = ~np.isfinite(value) | np.isnan(bound)
        out[name] = _Column(np.where(lost, np.nan, value), np.where(lost, np.inf, bound))
    return out
