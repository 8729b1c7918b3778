"""The Euro Stoxx 50 surface of 7 October 2003: 144 implied volatilities, spot 2461.44, flat rate 3 %, no yield.

Source: Schoutens, Simons, Tistaert, "A perfect calibration! Now what?", Wilmott magazine, March 2004, appendix (digits
from memory).
"""

from __future__ import annotations

import csv
import math
from pathlib import Path

__all__ = ["RATE", "SPOT", "discount_factor", "forward", "quotes"]

SPOT = 2461.44
RATE = 0.03
_FILE = Path(__file__).parents[1] / "published" / "data" / "index_surface_2003.csv"


def quotes() -> dict[float, list[tuple[float, float]]]:
    """Strike and volatility by expiry in years."""
    lines = [line for line in _FILE.read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    out: dict[float, list[tuple[float, float]]] = {}
    for row in csv.DictReader(lines):
        out.setdefault(float(row["expiry_years"]), []).append((float(row["strike"]), float(row["implied_vol"])))
    assert sum(len(column) for column in out.values()) == 144
    return out


def forward(expiry: float) -> float:
    """S exp(r tau)."""
    return SPOT * math.exp(RATE * expiry)


def discount_factor(expiry: float) -> float:
    """exp(-r tau)."""
    return math.exp(-RATE * expiry)
