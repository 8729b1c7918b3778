"""Black-76: price, Greeks, bounds and the inversion for implied volatility."""

from __future__ import annotations

from engine.black.formula import log_otm_value, otm_value
from engine.black.greeks import BlackGreeks, black_greeks
from engine.black.implied_vol import ImpliedVols, implied_vols
from engine.black.inversion import MAX_EVALUATIONS, TotalDeviations, total_deviation

__all__ = [
    "MAX_EVALUATIONS",
    "BlackGreeks",
    "ImpliedVols",
    "TotalDeviations",
    "black_greeks",
    "implied_vols",
    "log_otm_value",
    "otm_value",
    "total_deviation",
]
