"""Quotes laid out for a fit: which take part, and what an error in each of them weighs.

With the error ``e_i = model - market`` of quote ``i`` in volatility (``residuals="vol"``) or in price (``"price"``,
discounted, in the unit of the forward), the fit minimises ``mean((w_i e_i)^2)``. ``v_i`` is Black's vega at the market
volatility and ``h_i`` half the bid-ask spread, in volatility or in price:

    weights     vol             price
    uniform     1               1
    vega        v_i             1 / max(v_i, 0.01 max v)      (prices over vegas stand for volatilities to first order)
    spread      1 / h_i         1 / h_i                       (h_i at least a tenth of the median one)

and all ``w`` are scaled together so that an error of 0.01 in every volatility weighs 1 (to first order, for prices).
Dividing price errors by vegas and capping the quotient: R. Cont and P. Tankov, "Financial Modelling with Jump
Processes" (2004), section 13.1 (from memory); the floors are ours.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Floats, Ints, vector
from engine.black import otm_value
from engine.calibration.records import CalibrationSettings, CalibrationSlice
from engine.errors import InputError
from engine.moneyness import log_moneyness
from engine.slices import Batch, Slice, side_by_side
from engine.status import Payoff

__all__ = ["VOL_POINT", "Quotes", "coerced", "density_of", "lay_out"]

VOL_POINT = 0.01
_LEAST_VALUE = 1e-60  # per unit forward: an option worth less is not quoted, and its vega is near the end of doubles
_VEGA_FLOOR = 0.01
_SPREAD_FLOOR = 0.1
_VOL_RANGE = (1e-4, 10.0)


@dataclass(frozen=True, slots=True)
class Quotes:
    """The quotes used, side by side (n,), in slices that have any. ``used``: a mask per slice sent, of its strikes.
    ``money``: price per unit of undiscounted value per unit forward. ``value``, ``vega``: Black's at the market vol, so
    normalised."""

    used: list[np.ndarray]
    batch: Batch
    k: Floats
    root_tau: Floats
    vols: Floats
    value: Floats
    vega: Floats
    money: Floats
    weights: Floats

    @property
    def members(self) -> Ints:
        """Slice of each quote, counted among those with any."""
        return self.batch.slice_of


def density_of(k: Floats, s: Floats) -> Floats:
    """``n(d1)``, Black's derivative of the undiscounted value per unit forward by the total deviation ``s``."""
    d1 = 0.5 * s - k / s
    return np.asarray(np.exp(-0.5 * d1 * d1) / np.sqrt(2.0 * np.pi))


def coerced(slices: Sequence[CalibrationSlice]) -> list[CalibrationSlice]:
    """The slices with float64 columns of one length each. Raises InputError with the place of the fault."""
    if len(slices) == 0:
        raise InputError("slices", "is empty", allowed="at least one slice")
    out = []
    for i, one in enumerate(slices):
        n = np.size(one.strikes)
        columns: dict[str, Any] = {}
        for name in ("strikes", "vols", "bid_vols", "ask_vols"):
            found = getattr(one, name)
            if found is None and name != "vols":
                columns[name] = None
                continue
            try:
                columns[name] = vector(f"slices.{name}", found, length=n)
            except InputError as fault:
                raise InputError(fault.argument, fault.reason, index=(i,), allowed=fault.allowed) from None
        out.append(CalibrationSlice(float(one.expiry), float(one.forward), float(one.discount_factor), **columns))
    return out


def lay_out(slices: Sequence[CalibrationSlice], settings: CalibrationSettings) -> Quotes:
    """Check the slices (``coerced``), choose the quotes and weigh them. Raises InputError with the place of the
    fault."""
    for i, one in enumerate(slices):
        if settings.weights == "spread" and (one.bid_vols is None or one.ask_vols is None):
            raise InputError(
                "weights", f"is 'spread', but slice {i} has no bid_vols and ask_vols", allowed="'uniform' or 'vega'"
            )
    side_by_side([_otm(one, np.ones(one.strikes.shape, dtype=bool)) for one in slices])
    used = [_usable(one, settings.weights == "spread") for one in slices]
    chosen = [(one, mask) for one, mask in zip(slices, used, strict=True) if mask.any()]
    if not chosen:
        raise InputError("slices.vols", "has no usable volatility", allowed=f"{_VOL_RANGE[0]:g} to {_VOL_RANGE[1]:g}")
    batch = side_by_side([_otm(one, mask) for one, mask in chosen])
    vols = np.concatenate([one.vols[mask] for one, mask in chosen])
    k = log_moneyness(batch.strikes, batch.forward[batch.slice_of])
    root_tau = np.sqrt(batch.expiry[batch.slice_of])
    money = (batch.forward * batch.discount)[batch.slice_of]
    vega = density_of(k, vols * root_tau) * root_tau
    half = None
    if settings.weights == "spread":
        low = np.concatenate([np.asarray(one.bid_vols)[mask] for one, mask in chosen])
        high = np.concatenate([np.asarray(one.ask_vols)[mask] for one, mask in chosen])
        if settings.residuals == "price":
            half = 0.5 * money * (otm_value(k, high * root_tau) - otm_value(k, low * root_tau))
        else:
            half = 0.5 * (high - low)
    weights = _weights(settings, vega * money, half)
    return Quotes(used, batch, k, root_tau, vols, otm_value(k, vols * root_tau), vega, money, weights)


def _otm(one: CalibrationSlice, mask: np.ndarray) -> Slice:
    strikes = one.strikes[mask]
    payoffs = np.full(strikes.shape, int(Payoff.OTM), dtype=np.uint8)
    return Slice(one.expiry, one.forward, one.discount_factor, strikes, payoffs)


def _usable(one: CalibrationSlice, spread: bool) -> np.ndarray:
    with np.errstate(invalid="ignore"):
        mask = (one.vols >= _VOL_RANGE[0]) & (one.vols <= _VOL_RANGE[1])
        if spread:
            low, high = np.asarray(one.bid_vols), np.asarray(one.ask_vols)
            mask &= np.isfinite(low) & np.isfinite(high) & (low >= 0.0) & (high >= low)
        k = log_moneyness(one.strikes, np.full(one.strikes.shape, one.forward))
        mask &= otm_value(k, np.where(mask, one.vols, 0.0) * np.sqrt(one.expiry)) >= _LEAST_VALUE
    return np.asarray(mask)


def _weights(settings: CalibrationSettings, vega: Floats, half: Floats | None) -> Floats:
    """``w`` of the module's docstring; ``vega`` in money, ``half`` the half spreads if asked for."""
    price = settings.residuals == "price"
    if half is not None:
        floor = _SPREAD_FLOOR * float(np.median(half))
        if floor <= 0.0:
            raise InputError("weights", "is 'spread', but most spreads are zero", allowed="'uniform' or 'vega'")
        raw = 1.0 / np.maximum(half, floor)
    elif settings.weights == "vega":
        raw = 1.0 / np.maximum(vega, _VEGA_FLOOR * float(vega.max())) if price else vega
    else:
        raw = np.ones_like(vega)
    point = VOL_POINT * (vega if price else 1.0)
    return np.asarray(raw / np.sqrt(np.mean((raw * point) ** 2)))
