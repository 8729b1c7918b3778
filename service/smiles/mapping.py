"""Between the schemas of ``/v1/smiles`` and the engine's columns."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

import numpy as np

from engine import Payoff, PricedSlice, Slice, Status, price_smiles
from service.compute import Outcome, Task
from service.encoding import encode
from service.settings import Settings
from service.smiles.schemas import SmilesAsked
from service.terms.mapping import Faults, SliceTerms, check_sizes, payoff_codes, resolve
from service.terms.models import engine_model
from service.terms.plausibility import warnings_of

__all__ = ["plan"]

_STATUS_WORDS: Final = {int(status): status.word for status in Status}
_PAYOFF_WORDS: Final = {int(payoff): payoff.word for payoff in Payoff}


def plan(asked: SmilesAsked, settings: Settings) -> Task:
    """The task of one request; raises Problem for sizes over a limit and terms that do not fit together."""
    strikes = check_sizes(asked.slices, settings)
    faults = Faults()
    terms = resolve(asked, asked.slices, faults, alive=True)
    columns = [np.array(one.strikes, dtype=np.float64) for one in asked.slices]
    payoffs = [
        payoff_codes(one.payoff, len(one.strikes), faults, "slices", i, "payoff") for i, one in enumerate(asked.slices)
    ]
    faults.refuse()
    model = engine_model(asked.model)
    slices = [
        Slice(t.expiry, t.forward, t.discount_factor, column, codes)
        for t, column, codes in zip(terms, columns, payoffs, strict=True)
    ]
    warnings = warnings_of(
        market=asked.market, model=asked.model, slices=terms, strikes=[one.strikes for one in asked.slices]
    )

    def work(node_limit: int) -> Outcome:
        priced = price_smiles(
            model,
            slices,
            tolerance=asked.tolerance,
            node_limit=node_limit,
            implied_vols="implied_vol" in asked.outputs,
        )
        found = [_slice_answer(t, s, p, asked.outputs) for t, s, p in zip(terms, slices, priced, strict=True)]
        nodes = sum(p.transform.nodes for p in priced)
        return Outcome(encode({"slices": found, "warnings": warnings}), nodes)

    return Task(work, strikes, len(slices))


def _slice_answer(terms: SliceTerms, asked: Slice, priced: PricedSlice, outputs: Sequence[str]) -> dict[str, Any]:
    answer: dict[str, Any] = {
        "expiry": terms.expiry,
        "forward": terms.forward,
        "discount_factor": terms.discount_factor,
        "strikes": asked.strikes,
        "payoffs": [_PAYOFF_WORDS[code] for code in priced.payoffs.tolist()],
        "statuses": [_STATUS_WORDS[code] for code in priced.statuses.tolist()],
    }
    if "price" in outputs:
        answer["prices"] = priced.prices
    if "implied_vol" in outputs:
        answer["implied_vols"] = priced.implied_vols
    if "error_bound" in outputs:
        answer["error_bounds"] = priced.error_bounds
    report = priced.transform
    answer["transform"] = {"method": report.method, "exponents": report.exponents, "nodes": report.nodes}
    return answer
