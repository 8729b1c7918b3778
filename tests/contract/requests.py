"""Requests that many tests begin from."""

from __future__ import annotations

from copy import deepcopy
from typing import Any

__all__ = ["LEWIS", "PUBLISHED", "changed", "lewis"]

# A. Lewis, "Heston Model Reference Prices", 15 February 2019: spot 100, one year, rate 1 %, dividend yield 2 %; calls.
# (His theta is kappa here, his omega kappa * theta.)
LEWIS: dict[str, Any] = {
    "model": {"name": "heston", "v0": 0.04, "kappa": 4.0, "theta": 0.25, "sigma": 1.0, "rho": -0.5},
    "market": {"spot": 100.0, "rate": 0.01, "dividend_yield": 0.02},
    "slices": [{"expiry": 1.0, "strikes": [80.0, 90.0, 100.0, 110.0, 120.0], "payoff": "call"}],
}
PUBLISHED = {
    "call": [
        "26.774758743998854221382195325726949201687",
        "20.933349000596710388139445766564068085476",
        "16.070154917028834278213466703938231827658",
        "12.132211516709844867860534767549426052805",
        "9.024913483457835636553375454092357136489",
    ],
    "put": [
        "7.958878113256768285213263077598987193482",
        "12.017966707346304987709573290236471654992",
        "17.055270961270109413522653999411000974895",
        "23.017825898442800538908781834822560777763",
        "29.811026202682471843340682293165857439167",
    ],
}


def lewis(**members: Any) -> dict[str, Any]:
    """The published request with members of its top level added or replaced."""
    return {**deepcopy(LEWIS), **members}


def changed(body: dict[str, Any], pointer: str, value: Any) -> dict[str, Any]:
    """A copy of a body with one value set; the last part of the pointer may be a new field."""
    copy: Any = deepcopy(body)
    here = copy
    *way, last = [int(part) if part.isdigit() else part for part in pointer.split("/")[1:]]
    for part in way:
        here = here[part]
    here[last] = value
    return dict(copy)
