"""``POST /v1/chains``."""

from __future__ import annotations

from typing import Final

from service.array_route import ArrayOperation
from service.chains.mapping import plan
from service.chains.schemas import ChainAnswer
from service.terms.chain import EXAMPLE, ChainAsked

__all__ = ["OPERATION"]

OPERATION: Final = ArrayOperation(
    path="/v1/chains",
    operation_id="read_chain",
    tag="Market",
    summary="Turn an option chain into forwards, volatilities and flags",
    description=(
        "Per expiry: forward and discount factor by put-call parity regression, robust to bad quotes, with standard "
        "errors; bid, mid and ask volatilities of the out-of-the-money side; and what is wrong with which quote. "
        "Options are taken to be European."
    ),
    request=ChainAsked,
    answer=ChainAnswer,
    plan=plan,
    example=EXAMPLE,
)
