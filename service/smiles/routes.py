"""``POST /v1/smiles``."""

from __future__ import annotations

from typing import Final

from service.array_route import ArrayOperation
from service.smiles.mapping import plan
from service.smiles.schemas import EXAMPLE, SmilesAnswer, SmilesAsked

__all__ = ["OPERATION"]

OPERATION: Final = ArrayOperation(
    path="/v1/smiles",
    operation_id="price_smiles",
    tag="Pricing",
    summary="Price smiles under a model",
    description=(
        "Prices, implied volatilities and error bounds of whole strike vectors, one or more expiries at once. "
        "Each bound holds for the number beside it as returned. Prices are model values, not quotes."
    ),
    request=SmilesAsked,
    answer=SmilesAnswer,
    plan=plan,
    example=EXAMPLE,
)
