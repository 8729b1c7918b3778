"""Between the schemas of ``/v1/chains`` and the engine's columns."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from engine import Payoff, Status, Surface, SurfaceExpiry, build_surface, flag_words
from service.compute import Outcome, Task
from service.encoding import encode
from service.settings import Settings
from service.terms.chain import ChainAsked, check_chain, engine_chain
from service.terms.mapping import Faults, check_sizes

__all__ = ["plan"]

_STATUS_WORDS: Final = {int(status): status.word for status in Status}
_PAYOFF_WORDS: Final = {int(payoff): payoff.word for payoff in Payoff}


def plan(asked: ChainAsked, settings: Settings) -> Task:
    """The task of one request; raises Problem for sizes over a limit and columns of other lengths."""
    strikes = check_sizes(asked.expiries, settings, name="expiries")
    faults = Faults()
    years = check_chain(asked, faults)
    faults.refuse()

    def work(_node_limit: int) -> Outcome:
        return Outcome(encode(_answer(build_surface(engine_chain(asked, years)), asked.spot)))

    return Task(work, strikes, len(asked.expiries), light=False)


def _answer(surface: Surface, spot: float | None) -> dict[str, Any]:
    return {"expiries": [_expiry(one, spot) for one in surface.expiries], "totals": asdict(surface.totals)}


def _expiry(one: SurfaceExpiry, spot: float | None) -> dict[str, Any]:
    sides = {"bid": one.bid, "mid": one.mid, "ask": one.ask}
    return {
        "expiry": one.expiry,
        "strikes": one.strikes,
        "status": one.status.word,
        "forward": one.forward,
        "discount_factor": one.discount_factor,
        "forward_standard_error": one.forward_error,
        "discount_factor_standard_error": one.discount_factor_error,
        **_implied_rates(one, spot),
        "pairs": one.pairs,
        "pairs_used": one.pairs_used,
        "rms_residual": one.rms_residual,
        "payoffs": [_PAYOFF_WORDS[code] for code in one.payoffs.tolist()],
        "implied_vols": {name: side.vols for name, side in sides.items()},
        "statuses": {name: _words(side.statuses) for name, side in sides.items()},
        "flags": {
            "calls": [flag_words(code) for code in one.call_flags.tolist()],
            "puts": [flag_words(code) for code in one.put_flags.tolist()],
        },
        "usable": one.usable,
        "warnings": one.warnings,
    }


def _words(statuses: NDArray[np.uint8]) -> list[str]:
    return [_STATUS_WORDS[code] for code in statuses.tolist()]


def _implied_rates(one: SurfaceExpiry, spot: float | None) -> dict[str, float | None]:
    """The continuous rate and dividend yield that discount factor, forward and spot imply."""
    if not (one.expiry > 0.0 and one.discount_factor > 0.0):
        return {"rate": None, "dividend_yield": None}
    rate = -math.log(one.discount_factor) / one.expiry
    if spot is None or not one.forward > 0.0:
        return {"rate": rate, "dividend_yield": None}
    return {"rate": rate, "dividend_yield": rate - math.log(one.forward / spot) / one.expiry}
