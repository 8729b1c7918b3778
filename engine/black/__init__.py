"""Black-76: price, Greeks, bounds and the inversion for implied volatility."""

from __future__ import annotations

from engine.black.formula import log_otm_value, otm_value
from engine.black.inversion import TotalDeviations, total_deviation

__all__ = ["TotalDeviations", "log_otm_value", "otm_value", "total_deviation"]
