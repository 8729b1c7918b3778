"""Between the schemas of ``/v1/smiles`` and the engine's columns."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from engine import PricedSlice, price_smiles
from service.compute import Outcome, Task
from service.encoding import encode
from service.joint import Joint
from service.settings import Settings
from service.smiles.schemas import SmilesAsked
from service.terms.pricing import Prepared, models_and_slices, prepare, slice_answer

__all__ = ["plan"]


@dataclass(frozen=True, slots=True)
class _Part:
    asked: SmilesAsked
    ready: Prepared


def plan(asked: SmilesAsked, settings: Settings) -> Task:
    """The task of one request; raises Problem for sizes over a limit and terms that do not fit together."""
    part = _Part(asked, prepare(asked, settings))
    key = ("smiles", asked.tolerance, "implied_vol" in asked.outputs)
    return Task(
        lambda node_limit: _price([part], node_limit)[0],
        part.ready.strikes,
        len(part.ready.slices),
        joint=Joint(key, part, part.ready.strikes, _price),
    )


def _price(parts: Sequence[_Part], node_limit: int) -> list[Outcome]:
    """Answers to requests of one tolerance, all with volatilities or all without, in one call of the engine."""
    asked = parts[0].asked
    models, slices = models_and_slices([part.ready for part in parts])
    priced = iter(
        price_smiles(
            models,
            slices,
            tolerance=asked.tolerance,
            node_limit=node_limit,
            implied_vols="implied_vol" in asked.outputs,
        )
    )
    return [_answer(part, [next(priced) for _ in part.ready.slices]) for part in parts]


def _answer(part: _Part, priced: list[PricedSlice]) -> Outcome:
    asked, ready = part.asked, part.ready
    found = [slice_answer(t, s, p, asked.outputs) for t, s, p in zip(ready.terms, asked.slices, priced, strict=True)]
    return Outcome(encode({"slices": found, "warnings": ready.warnings}), sum(p.transform.nodes for p in priced))
