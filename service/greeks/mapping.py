"""Between the schemas of ``/v1/greeks`` and the engine's columns."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final, TypeAlias

import numpy as np
from numpy.typing import NDArray

from engine import GreekSlice, price_greeks
from service.compute import Outcome, Task
from service.encoding import encode
from service.greeks.definitions import definitions
from service.greeks.schemas import GreeksAsked
from service.joint import Joint
from service.settings import Settings
from service.terms.pricing import Prepared, models_and_slices, prepare, slice_answer

__all__ = ["plan"]

Columns: TypeAlias = dict[str, NDArray[np.float64]]
_BLACK: Final = frozenset({"vega", "vanna", "volga", "black_delta", "black_gamma"})
_OK, _NO_VOL, _NO_BOUND = range(3)
_WORDS: Final = np.array(["ok", "no_implied_vol", "no_bound"], dtype=object)


@dataclass(frozen=True, slots=True)
class _Part:
    asked: GreeksAsked
    ready: Prepared


def plan(asked: GreeksAsked, settings: Settings) -> Task:
    """The task of one request; raises Problem for sizes over a limit and terms that do not fit together."""
    part = _Part(asked, prepare(asked, settings))
    key = ("greeks", asked.tolerance, tuple(asked.greeks), asked.sensitivities)
    return Task(
        lambda node_limit: _price([part], node_limit)[0],
        part.ready.strikes,
        len(part.ready.slices),
        joint=Joint(key, part, part.ready.strikes, _price),
    )


def _price(parts: Sequence[_Part], node_limit: int) -> list[Outcome]:
    """Answers to requests of one tolerance and the same Greeks, in one call of the engine."""
    asked = parts[0].asked
    models, slices = models_and_slices([part.ready for part in parts])
    found = iter(
        price_greeks(
            models,
            slices,
            greeks=asked.greeks,
            sensitivities=asked.sensitivities,
            tolerance=asked.tolerance,
            node_limit=node_limit,
        )
    )
    return [_answer(part, [next(found) for _ in part.ready.slices]) for part in parts]


def _answer(part: _Part, found: list[GreekSlice]) -> Outcome:
    asked, ready = part.asked, part.ready
    slices = []
    for terms, sent, one in zip(ready.terms, asked.slices, found, strict=True):
        answer = slice_answer(terms, sent, one.priced, asked.outputs)
        _add_greeks(answer, one, bounds="error_bound" in asked.outputs, sensitivities=asked.sensitivities)
        slices.append(answer)
    told = definitions(
        asked.model.name, tuple(found[0].greeks), sensitivities=asked.sensitivities, base=found[0].with_respect_to
    )
    nodes = sum(one.priced.transform.nodes for one in found)
    return Outcome(encode({"slices": slices, "definitions": told, "warnings": ready.warnings}), nodes)


def _add_greeks(answer: dict[str, Any], found: GreekSlice, *, bounds: bool, sensitivities: bool) -> None:
    """What a slice has beyond its prices."""
    statuses = np.full(found.priced.prices.shape, _OK)
    no_vol = np.isnan(found.priced.implied_vols)
    greeks = _bounded(found.greeks, found.greek_bounds, statuses, no_vol)
    slopes = _bounded(found.sensitivities, found.sensitivity_bounds, statuses, no_vol)
    answer["with_respect_to"] = found.with_respect_to
    answer["greek_statuses"] = _WORDS[statuses].tolist()
    answer["greeks"] = greeks
    if bounds:
        answer["greek_error_bounds"] = found.greek_bounds
    if sensitivities:
        answer["sensitivities"] = slopes
        if bounds:
            answer["sensitivity_error_bounds"] = found.sensitivity_bounds


def _bounded(values: Columns, bounds: Columns, statuses: NDArray[np.int64], no_vol: NDArray[np.bool_]) -> Columns:
    """The columns, NaN where there is no finite bound; ``statuses`` are told why."""
    if not values or np.isfinite(np.concatenate(list(bounds.values()))).all():
        return values
    out = {}
    for name, column in values.items():
        lost = ~np.isfinite(bounds[name])
        out[name] = np.where(lost, np.nan, column)
        reason = np.where(no_vol, _NO_VOL, _NO_BOUND) if name in _BLACK else _NO_BOUND
        statuses[lost] = np.maximum(statuses, reason)[lost]
    return out
