"""The engine of Smilewright: option chains to forwards and volatilities, models to whole smiles with error bounds."""

from __future__ import annotations

from engine.errors import EngineError, InputError, RefusedError
from engine.models.black import Black
from engine.models.heston import Heston
from engine.protocols import Model, ParameterSpec
from engine.slices import EXPIRY_RANGE, Slice
from engine.smile import TOLERANCE_RANGE, PricedSlice, TransformReport, price_smiles
from engine.status import Payoff, Status

__all__ = [
    "EXPIRY_RANGE",
    "MODELS",
    "TOLERANCE_RANGE",
    "EngineError",
    "InputError",
    "Model",
    "ParameterSpec",
    "Payoff",
    "PricedSlice",
    "RefusedError",
    "Slice",
    "Status",
    "TransformReport",
    "price_smiles",
]

_KINDS: tuple[type[Model], ...] = (Black, Heston)
MODELS: dict[str, type[Model]] = {kind.name: kind for kind in _KINDS}
