"""From a pricing request to the engine's slices, and from a priced slice to its part of the answer."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from engine import Model, Payoff, PricedSlice, Slice, Status
from service.settings import Settings
from service.terms.mapping import Faults, SliceTerms, check_sizes, payoff_codes, resolve
from service.terms.models import engine_model
from service.terms.plausibility import warnings_of
from service.terms.pricing_schemas import PricingAsked, SmileSliceAsked

__all__ = ["Prepared", "models_and_slices", "prepare", "slice_answer"]

_STATUS_WORDS: Final = np.array([status.word for status in Status], dtype=object)  # codes count from 0
_PAYOFF_WORDS: Final = np.array([payoff.word for payoff in Payoff], dtype=object)


@dataclass(frozen=True, slots=True)
class Prepared:
    """A pricing request in the engine's terms. ``strikes``: how many in all."""

    model: Model
    slices: list[Slice]
    terms: list[SliceTerms]
    warnings: list[dict[str, str]]
    strikes: int


def prepare(asked: PricingAsked, settings: Settings) -> Prepared:
    """What the engine is to price; raises Problem for sizes over a limit and terms that do not fit together."""
    strikes = check_sizes(asked.slices, settings)
    faults = Faults()
    terms = resolve(asked, asked.slices, faults, alive=True)
    columns = [np.array(one.strikes, dtype=np.float64) for one in asked.slices]
    payoffs = [
        payoff_codes(one.payoff, len(one.strikes), faults, "slices", i, "payoff") for i, one in enumerate(asked.slices)
    ]
    faults.refuse()
    spot = None if asked.market is None else asked.market.spot
    slices = [
        Slice(t.expiry, t.forward, t.discount_factor, column, codes, spot)
        for t, column, codes in zip(terms, columns, payoffs, strict=True)
    ]
    warnings = warnings_of(
        market=asked.market, model=asked.model, slices=terms, strikes=[one.strikes for one in asked.slices]
    )
    return Prepared(engine_model(asked.model), slices, terms, warnings, strikes)


def models_and_slices(requests: Sequence[Prepared]) -> tuple[Model | list[Model], list[Slice]]:
    """Arguments of one call of the engine for several requests: one model, or one a slice, and all slices in order."""
    if len(requests) == 1:
        return requests[0].model, requests[0].slices
    models = [one.model for one in requests for _ in one.slices]
    return models, [part for one in requests for part in one.slices]


def slice_answer(
    terms: SliceTerms, asked: SmileSliceAsked, priced: PricedSlice, outputs: Sequence[str]
) -> dict[str, Any]:
    """One slice of the answer; columns as they are, for ``service.encoding``."""
    answer: dict[str, Any] = {
        "expiry": terms.expiry,
        "forward": terms.forward,
        "discount_factor": terms.discount_factor,
        "strikes": asked.strikes,
        "payoffs": _PAYOFF_WORDS[priced.payoffs].tolist(),
        "statuses": _STATUS_WORDS[priced.statuses].tolist(),
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
