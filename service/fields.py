"""Fields of request and answer schemas: each with a description, a unit and an example; objects that refuse what they
do not know."""

from __future__ import annotations

from typing import Annotated, Any, Final

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["Answer", "Asked", "PRICE_RANGE", "Finite", "Strikes", "described"]

PRICE_RANGE: Final = (1e-12, 1e15)
"""Spot, forward and strikes: what the engine admits for a forward; beyond it arithmetic runs out, not markets."""


class Asked(BaseModel):
    """An object of a request: unknown fields are refused, numbers are numbers."""

    model_config = ConfigDict(strict=True, extra="forbid", allow_inf_nan=False)


class Answer(BaseModel):
    """An object of an answer, for the OpenAPI document and the tests; answers are encoded without it."""

    model_config = ConfigDict(extra="forbid")


def described(text: str, *, unit: str, example: Any, default: Any = ..., **limits: Any) -> Any:
    """A field with what every field must say. ``unit`` is in words, ``"none"`` where there is none."""
    return Field(default, description=text, examples=[example], json_schema_extra={"x-unit": unit}, **limits)


# The first bad value ends the reading of a column, so that a large one full of faults costs no more than a good one;
# small bodies are read again to the end for a full list (``service.validation``).
Finite = Annotated[float, Field(allow_inf_nan=False)]
Strikes = Annotated[
    list[Annotated[float, Field(ge=PRICE_RANGE[0], le=PRICE_RANGE[1], allow_inf_nan=False)]],
    Field(min_length=1, fail_fast=True),
]
