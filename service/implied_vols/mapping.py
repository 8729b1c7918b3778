"""Between the schemas of ``/v1/implied-vols`` and the engine's columns."""

from __future__ import annotations

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from engine import Payoff, Status, implied_vols
from service.compute import Outcome, Task
from service.encoding import encode
from service.implied_vols.schemas import ImpliedVolsAsked
from service.settings import Settings
from service.terms.mapping import Faults, SliceTerms, check_sizes, payoff_codes, resolve
from service.terms.plausibility import warnings_of

__all__ = ["plan"]

_STATUS_WORDS: Final = {int(status): status.word for status in Status}
_PAYOFF_WORDS: Final = {int(payoff): payoff.word for payoff in Payoff}


def plan(asked: ImpliedVolsAsked, settings: Settings) -> Task:
    """The task of one request; all slices are inverted in one call."""
    count = check_sizes(asked.slices, settings)
    faults = Faults()
    terms = resolve(asked, asked.slices, faults, alive=False)
    codes = []
    for i, one in enumerate(asked.slices):
        codes.append(payoff_codes(one.payoff, len(one.strikes), faults, "slices", i, "payoff"))
        if len(one.prices) != len(one.strikes):
            detail = f"has {len(one.prices)} entries for {len(one.strikes)} strikes; give one per strike"
            faults.add(detail, "slices", i, "prices")
    faults.refuse()
    prices = np.array([p for one in asked.slices for p in one.prices], dtype=np.float64)  # None becomes NaN
    strikes = np.array([k for one in asked.slices for k in one.strikes], dtype=np.float64)
    payoffs = np.concatenate(codes)
    lengths = [len(one.strikes) for one in asked.slices]
    warnings = warnings_of(market=asked.market, slices=terms, strikes=[one.strikes for one in asked.slices])

    def work(_node_limit: int) -> Outcome:
        forward = _repeated(terms, "forward", lengths)
        found = implied_vols(
            prices,
            strikes=strikes,
            forward=forward,
            discount_factor=_repeated(terms, "discount_factor", lengths),
            expiry=_repeated(terms, "expiry", lengths),
            payoffs=payoffs,
        )
        otm = np.where(strikes >= forward, Payoff.CALL, Payoff.PUT)
        resolved = np.where(payoffs == Payoff.OTM, otm, payoffs)
        ends = np.cumsum(lengths)
        slices = [
            _slice_answer(t, strikes[a:b], resolved[a:b], found.vols[a:b], found.statuses[a:b])
            for t, a, b in zip(terms, ends - lengths, ends, strict=True)
        ]
        return Outcome(encode({"slices": slices, "warnings": warnings}))

    return Task(work, count, len(lengths))


def _repeated(terms: list[SliceTerms], name: str, lengths: list[int]) -> NDArray[np.float64]:
    return np.repeat(np.array([getattr(one, name) for one in terms], dtype=np.float64), lengths)


def _slice_answer(
    terms: SliceTerms,
    strikes: NDArray[np.float64],
    payoffs: NDArray[np.int64],
    vols: NDArray[np.float64],
    statuses: NDArray[np.uint8],
) -> dict[str, Any]:
    return {
        "expiry": terms.expiry,
        "forward": terms.forward,
        "discount_factor": terms.discount_factor,
        "strikes": strikes,
        "payoffs": [_PAYOFF_WORDS[code] for code in payoffs.tolist()],
        "implied_vols": vols,
        "statuses": [_STATUS_WORDS[code] for code in statuses.tolist()],
    }
