"""``POST /v1/implied-vols``."""

from __future__ import annotations

from typing import Final

from service.array_route import ArrayOperation
from service.implied_vols.mapping import plan
from service.implied_vols.schemas import EXAMPLE, ImpliedVolsAnswer, ImpliedVolsAsked

__all__ = ["OPERATION"]

OPERATION: Final = ArrayOperation(
    path="/v1/implied-vols",
    operation_id="find_implied_vols",
    tag="Market",
    summary="Turn prices into implied volatilities",
    description=(
        "Black volatilities of discounted option prices, with a status for each price that has none. One bad price "
        "never fails the others."
    ),
    request=ImpliedVolsAsked,
    answer=ImpliedVolsAnswer,
    plan=plan,
    example=EXAMPLE,
)
