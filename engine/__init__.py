"""The engine of Smilewright: option chains to forwards and volatilities, models to whole smiles with error bounds."""

from __future__ import annotations

from engine.black import ImpliedVols, implied_vols
from engine.calibration import (
    CalibratedSlice,
    Calibration,
    CalibrationSettings,
    CalibrationSlice,
    Prior,
    calibrate,
)
from engine.errors import EngineError, InputError, RefusedError
from engine.greeks import GREEKS, GreekSlice, price_greeks
from engine.market.chain import ChainExpiry, QuoteFlag, flag_words
from engine.market.daycount import DAY_COUNTS, year_fraction
from engine.models.bates import Bates
from engine.models.black import Black
from engine.models.double_heston import DoubleHeston
from engine.models.heston import Heston
from engine.models.kou import Kou
from engine.models.merton import Merton
from engine.models.variance_gamma import VarianceGamma
from engine.protocols import Model, ParameterSpec
from engine.slices import EXPIRY_RANGE, Slice
from engine.smile import TOLERANCE_RANGE, PricedSlice, TransformReport, price_smiles
from engine.status import Payoff, Status
from engine.surface import QuotedVols, Surface, SurfaceExpiry, SurfaceTotals, build_surface

__all__ = [
    "DAY_COUNTS",
    "EXPIRY_RANGE",
    "GREEKS",
    "MODELS",
    "TOLERANCE_RANGE",
    "CalibratedSlice",
    "Calibration",
    "CalibrationSettings",
    "CalibrationSlice",
    "ChainExpiry",
    "EngineError",
    "GreekSlice",
    "ImpliedVols",
    "InputError",
    "Model",
    "ParameterSpec",
    "Payoff",
    "PricedSlice",
    "Prior",
    "QuoteFlag",
    "QuotedVols",
    "RefusedError",
    "Slice",
    "Status",
    "Surface",
    "SurfaceExpiry",
    "SurfaceTotals",
    "TransformReport",
    "build_surface",
    "calibrate",
    "flag_words",
    "implied_vols",
    "price_greeks",
    "price_smiles",
    "year_fraction",
]

_KINDS: tuple[type[Model], ...] = (Black, Heston, Bates, Merton, Kou, VarianceGamma, DoubleHeston)
MODELS: dict[str, type[Model]] = {kind.name: kind for kind in _KINDS}
