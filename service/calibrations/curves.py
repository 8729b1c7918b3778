"""Curves of a fitted model between the strikes that were sent, for the plots of a report."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any, Final

import numpy as np
from pydantic import TypeAdapter, ValidationError

from engine import EngineError, Payoff, Slice, price_smiles
from service.terms.models import AnyModel, ModelAsked, engine_model

__all__ = ["Curves", "curves_of"]

_POINTS: Final = 81
_TOLERANCE: Final = 1e-8  # far finer than a pixel


@dataclass(frozen=True, slots=True)
class Curves:
    """Per expiry of a surface: strikes and volatilities of the model's curve, and the model's volatility at the forward
    (NaN where it has none)."""

    strikes: list[list[float]]
    vols: list[list[float]]
    at_forward: list[float]


def curves_of(surface: Mapping[str, Any]) -> Curves:
    """Curves of one surface of a result. Where the parameters lie outside what can be priced, the points that the
    result itself has are joined instead."""
    try:
        model = engine_model(_models().validate_python(surface["model"]))
        priced = price_smiles(model, [_slice(one) for one in surface["slices"]], tolerance=_TOLERANCE)
    except (EngineError, ValidationError):
        return _joined(surface)
    return Curves(
        [_strikes(one)[:-1].tolist() for one in surface["slices"]],
        [one.implied_vols[:-1].tolist() for one in priced],
        [float(one.implied_vols[-1]) for one in priced],
    )


@cache
def _models() -> TypeAdapter[ModelAsked]:
    return TypeAdapter(AnyModel)


def _strikes(one: Mapping[str, Any]) -> Any:
    """Even steps of log-moneyness over the strikes of an expiry, and the forward at the end."""
    k = np.log(np.array([min(one["strikes"]), max(one["strikes"])]) / one["forward"])
    return one["forward"] * np.exp(np.append(np.linspace(k[0] - 0.005, k[1] + 0.005, _POINTS), 0.0))


def _slice(one: Mapping[str, Any]) -> Slice:
    strikes = _strikes(one)
    payoffs = np.full(strikes.shape, int(Payoff.OTM), dtype=np.uint8)
    return Slice(one["expiry"], one["forward"], one["discount_factor"], strikes, payoffs)


def _joined(surface: Mapping[str, Any]) -> Curves:
    strikes, vols = [], []
    for one in surface["slices"]:
        pairs = sorted(
            (k, math.nan if v is None else v) for k, v in zip(one["strikes"], one["model_vols"], strict=True)
        )
        strikes.append([k for k, _ in pairs])
        vols.append([v for _, v in pairs])
    return Curves(strikes, vols, [math.nan] * len(strikes))
