"""Between the schemas of ``/v1/calibrations`` and the engine's columns: one surface of a request, fitted."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from engine import (
    Calibration,
    CalibrationSettings,
    CalibrationSlice,
    EngineError,
    Payoff,
    Prior,
    Status,
    SurfaceExpiry,
    build_surface,
    calibrate,
    flag_words,
)
from service.calibrations.checks import surface_terms
from service.calibrations.requests import CalibrationAsked, SurfaceAsked, VolsAsked, VolSliceAsked
from service.terms.chain import ChainAsked, engine_chain
from service.terms.mapping import Faults, SliceTerms

__all__ = ["calibrated_surface", "without_fit"]

Floats = NDArray[np.float64]
_STATUS_WORDS: Final = {int(status): status.word for status in Status}


def calibrated_surface(asked: CalibrationAsked, index: int, check: Callable[[], None]) -> dict[str, Any]:
    """Fit one surface. What the engine refuses is a result with status ``refused``; ``check`` is called as the fit goes
    on and may end it by raising."""
    surface = asked.surfaces[index]
    terms = surface_terms(surface, Faults())
    left_out: list[dict[str, Any]] = []
    if terms.chain_years is not None and surface.chain is not None:
        slices = _of_chain(surface.chain, terms.chain_years, left_out)
    else:
        assert surface.vols is not None and terms.vol_terms is not None
        slices = _of_vols(surface.vols, terms.vol_terms)
    check()
    if not slices:
        return without_fit(surface, "refused", "no expiry of this surface can be fitted", left_out)
    try:
        fit = calibrate(slices, _settings(asked), progress=lambda *_: check())
    except EngineError as error:
        allowed = f"; allowed: {error.allowed}" if error.allowed else ""
        return without_fit(surface, "refused", f"{error.argument} {error.reason}{allowed}", left_out)
    return _answer(surface, slices, fit, left_out)


def without_fit(
    surface: SurfaceAsked, status: str, reason: str, left_out: Sequence[dict[str, Any]] = ()
) -> dict[str, Any]:
    """The result of a surface that was not fitted."""
    numbers: dict[str, Any] = dict.fromkeys(_NUMBERS)
    return {
        "id": surface.id,
        "status": status,
        **numbers,
        "slices": [],
        "left_out": list(left_out),
        "warnings": [reason],
    }


_NUMBERS: Final = (
    "parameters",
    "model",
    "standard_errors",
    "correlation",
    "correlation_order",
    "at_bound",
    "condition_number",
    "feller_ratio",
    "rmse_vol",
    "rmse_price",
    "max_abs_error_vol",
    "within_spread",
    "iterations",
    "evaluations",
)


def _settings(asked: CalibrationAsked) -> CalibrationSettings:
    prior = None if asked.prior is None else Prior(asked.prior.parameters, asked.prior.strength)
    return CalibrationSettings(
        model=asked.model,
        residuals=asked.residuals,
        weights=asked.weights,
        feller=asked.feller,
        loss=asked.loss,
        bounds={name: (low, high) for name, (low, high) in asked.bounds.items()},
        fixed=asked.fixed,
        start=asked.start,
        prior=prior,
        starts=asked.starts,
        seed=asked.seed,
    )


def _of_vols(vols: VolsAsked, terms: Sequence[SliceTerms]) -> list[CalibrationSlice]:
    return [_vol_slice(one, its) for one, its in zip(vols.slices, terms, strict=True)]


def _vol_slice(one: VolSliceAsked, terms: SliceTerms) -> CalibrationSlice:
    def column(values: list[float | None] | None) -> Floats | None:
        return None if values is None else np.array(values, dtype=np.float64)  # None becomes NaN

    return CalibrationSlice(
        expiry=terms.expiry,
        forward=terms.forward,
        discount_factor=terms.discount_factor,
        strikes=np.array(one.strikes, dtype=np.float64),
        vols=np.array(one.implied_vols, dtype=np.float64),
        bid_vols=column(one.bid_vols),
        ask_vols=column(one.ask_vols),
    )


def _of_chain(chain: ChainAsked, years: list[float], left_out: list[dict[str, Any]]) -> list[CalibrationSlice]:
    """Slices of the quotes that the clean-up finds usable; what it leaves out is noted."""
    slices = []
    for one in build_surface(engine_chain(chain, years)).expiries:
        if not (one.forward > 0.0 and one.discount_factor > 0.0 and one.expiry > 0.0):
            left_out.append({"expiry": one.expiry, "strike": None, "flags": [one.status.word]})
            continue
        for at in np.flatnonzero(~one.usable):
            left_out.append({"expiry": one.expiry, "strike": float(one.strikes[at]), "flags": _why(one, int(at))})
        if one.usable.any():
            slices.append(
                CalibrationSlice(
                    expiry=one.expiry,
                    forward=one.forward,
                    discount_factor=one.discount_factor,
                    strikes=one.strikes,
                    vols=np.where(one.usable, one.mid.vols, np.nan),
                    bid_vols=np.where(one.usable, one.bid.vols, np.nan),
                    ask_vols=np.where(one.usable, one.ask.vols, np.nan),
                )
            )
    return slices


def _why(one: SurfaceExpiry, at: int) -> list[str]:
    """The flags of the out-of-the-money quote; the status of its volatility where it has none."""
    flags = one.call_flags if one.payoffs[at] == Payoff.CALL else one.put_flags
    words = list(flag_words(int(flags[at])))
    return words or [_STATUS_WORDS[int(one.mid.statuses[at])]]


def _answer(
    surface: SurfaceAsked, slices: Sequence[CalibrationSlice], fit: Calibration, left_out: list[dict[str, Any]]
) -> dict[str, Any]:
    return {
        "id": surface.id,
        "status": fit.status,
        "parameters": fit.parameters,
        "model": _model_object(fit),
        "standard_errors": fit.standard_errors,
        "correlation": fit.correlation.tolist(),
        "correlation_order": fit.correlation_order,
        "at_bound": fit.at_bound,
        "condition_number": _finite(fit.condition_number),
        "feller_ratio": _finite(fit.feller_ratio),
        "rmse_vol": _finite(fit.rmse_vol),
        "rmse_price": _finite(fit.rmse_price),
        "max_abs_error_vol": _finite(fit.max_abs_error_vol),
        "within_spread": fit.within_spread,
        "iterations": fit.iterations,
        "evaluations": fit.evaluations,
        "slices": [
            {
                "expiry": one.expiry,
                "forward": sent.forward,
                "discount_factor": sent.discount_factor,
                "strikes": one.strikes,
                "market_vols": one.market_vols,
                "bid_vols": sent.bid_vols,
                "ask_vols": sent.ask_vols,
                "model_vols": one.model_vols,
                "residual_vols": one.residual_vols,
                "used": one.used.tolist(),
            }
            for sent, one in zip(slices, fit.slices, strict=True)
        ],
        "left_out": left_out,
        "warnings": fit.warnings,
    }


def _model_object(fit: Calibration) -> dict[str, Any]:
    """The fitted parameters as a ``model`` of the other requests: names with a dot are those of a factor."""
    out: dict[str, Any] = {"name": fit.model}
    for name, value in fit.parameters.items():
        group, _, rest = name.partition(".")
        if not rest:
            out[name] = value
            continue
        place, _, last = rest.partition(".")
        factors = out.setdefault(group, [])
        while len(factors) <= int(place):
            factors.append({})
        factors[int(place)][last] = value
    return out


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None
