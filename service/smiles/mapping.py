"""Between the schemas of ``/v1/smiles`` and the engine's columns."""

from __future__ import annotations

from engine import price_smiles
from service.compute import Outcome, Task
from service.encoding import encode
from service.settings import Settings
from service.smiles.schemas import SmilesAsked
from service.terms.pricing import prepare, slice_answer

__all__ = ["plan"]


def plan(asked: SmilesAsked, settings: Settings) -> Task:
    """The task of one request; raises Problem for sizes over a limit and terms that do not fit together."""
    ready = prepare(asked, settings)

    def work(node_limit: int) -> Outcome:
        priced = price_smiles(
            ready.model,
            ready.slices,
            tolerance=asked.tolerance,
            node_limit=node_limit,
            implied_vols="implied_vol" in asked.outputs,
        )
        found = [
            slice_answer(t, s, p, asked.outputs) for t, s, p in zip(ready.terms, asked.slices, priced, strict=True)
        ]
        nodes = sum(p.transform.nodes for p in priced)
        return Outcome(encode({"slices": found, "warnings": ready.warnings}), nodes)

    return Task(work, ready.strikes, len(ready.slices))
