"""Doubts about a fit in plain words: bounds, Feller's condition, what the surface does not identify."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats
from engine.calibration.records import CalibrationSettings

__all__ = ["Doubts", "warnings_of"]

_ALIKE = 0.98  # a correlation of estimates from which on the two can hardly be told apart (common practice, no source)
_SAME_END = 1e-3  # relative difference in cost of two starts that ended in one place
_WORDS = {
    "v0": "the initial variance",
    "kappa": "mean reversion",
    "theta": "the long-run variance",
    "sigma": "the volatility of variance",
    "rho": "the correlation",
    "volatility": "the volatility",
    "jump_intensity": "the jump intensity",
    "jump_mean": "the mean jump",
    "jump_stdev": "the deviation of the jumps",
}
_GAMMA_WORDS = {"sigma": "the volatility of the motion", "theta": "its drift", "nu": "the variance of the clock"}


@dataclass(frozen=True, slots=True)
class Doubts:
    """All that warnings are made from; ``ends`` of the free parameters, ``dependent``: those that Feller's condition
    bounds; ``costs``: where each start ended."""

    status: str
    parameters: Mapping[str, float]
    standard_errors: Mapping[str, float | None]
    correlation: Floats
    order: tuple[str, ...]
    held: list[str]
    ends: Mapping[str, tuple[float, float]]
    dependent: list[str]
    feller: float | None
    quotes: int
    left_out: int
    expiries: int
    costs: tuple[float, ...]


def warnings_of(doubts: Doubts, settings: CalibrationSettings) -> list[str]:
    """Sentences, gravest first."""
    out = []
    if doubts.status == "stopped":
        out.append(f"the fit did not converge within {settings.max_evaluations} surface evaluations a descent")
    out += [_bound(name, doubts, settings) for name in doubts.held]
    out += _feller(doubts, settings)
    out += _identification(doubts, settings)
    if doubts.left_out:
        total = doubts.left_out + doubts.quotes
        out.append(f"{doubts.left_out} of {total} quotes took no part in the fit: no usable volatility or spread")
    elsewhere = sum(cost > min(doubts.costs) * (1.0 + _SAME_END) + 1e-18 for cost in doubts.costs)
    if elsewhere:
        out.append(f"{elsewhere} of {len(doubts.costs)} starts ended in a worse fit: there are several minima")
    return out


def _word(name: str, settings: CalibrationSettings) -> str:
    short = name.split(".")[-1]
    words = _GAMMA_WORDS if settings.model == "variance_gamma" else _WORDS
    return f"{words.get(short, short)} ({name})"


def _bound(name: str, doubts: Doubts, settings: CalibrationSettings) -> str:
    value = doubts.parameters[name]
    low, high = doubts.ends[name]
    lower = abs(value - low) <= abs(high - value)
    if name in doubts.dependent and abs(value - (low if lower else high)) > 1e-9 * max(abs(value), 1e-9):
        return (
            f"{_word(name, settings)} sits where the Feller condition stops it, at {value:.6g}: "
            "the surface wants 2 kappa theta below sigma^2"
        )
    side, end, more = ("lower", low, "less") if lower else ("upper", high, "more")
    return f"{_word(name, settings)} sits on its {side} bound of {end:.6g}: the surface wants {more}"


def _feller(doubts: Doubts, settings: CalibrationSettings) -> list[str]:
    if doubts.feller is None or doubts.feller >= 1.0 or settings.feller == "require":
        return []
    return [
        f"the Feller condition does not hold (2 kappa theta / sigma^2 is {doubts.feller:.3g}): "
        "the variance can reach zero; it was reported, not required"
    ]


def _identification(doubts: Doubts, settings: CalibrationSettings) -> list[str]:
    out = []
    free = [name for name in doubts.ends if name not in doubts.held]
    if doubts.quotes <= len(free):
        return [f"{doubts.quotes} quotes for {len(free)} parameters: no standard errors can be given"]
    for name in free:
        error = doubts.standard_errors[name]
        if error is None:
            out.append(f"{_word(name, settings)} is not identified by this surface: the fit does not depend on it")
        elif error > abs(doubts.parameters[name]):
            out.append(
                f"{_word(name, settings)} is not identified by this surface: its standard error exceeds its value"
            )
    if doubts.expiries == 1 and any(name.endswith("kappa") for name in free):
        out.append("one expiry only: mean reversion and the long-run variance cannot be told apart")
    for i, j in zip(*np.triu_indices(len(doubts.order), 1), strict=True):
        both = float(doubts.correlation[i, j])
        if abs(both) > _ALIKE:
            first, second = doubts.order[i], doubts.order[j]
            out.append(f"{first} and {second} can hardly be told apart: their estimates have correlation {both:.3f}")
    return out
