"""``POST /v1/greeks``."""

from __future__ import annotations

from typing import Final

from service.array_route import ArrayOperation
from service.greeks.mapping import plan
from service.greeks.schemas import EXAMPLE, GreeksAnswer, GreeksAsked

__all__ = ["OPERATION"]

OPERATION: Final = ArrayOperation(
    path="/v1/greeks",
    operation_id="compute_greeks",
    tag="Pricing",
    summary="Greeks and parameter sensitivities of smiles",
    description=(
        "What /v1/smiles answers, with Greeks and derivatives by every parameter of the model from the same transform, "
        "each with an error bound. The answer's definitions give unit and meaning of every number in it. Model values, "
        "not quotes."
    ),
    request=GreeksAsked,
    answer=GreeksAnswer,
    plan=plan,
    example=EXAMPLE,
)
