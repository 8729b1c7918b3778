"""What operations say of themselves in the OpenAPI document beyond their models: refusals, tags."""

from __future__ import annotations

from typing import Any, Final

from service.fields import Answer, described
from service.problems import KINDS, MEDIA_TYPE

__all__ = ["TAGS", "CheckAnswer", "FaultAnswer", "ProblemAnswer", "refusals"]

TAGS: Final = {
    "Pricing": "Model and market in, prices with error bounds out.",
    "Jobs": "Long work, kept until it is done: submit, follow, look up, cancel.",
    "Market": "Quotes in, forwards, volatilities and flags out.",
    "Reference": "What this service has.",
    "Operations": "For whoever runs the service.",
}


class FaultAnswer(Answer):
    """One value at fault."""

    pointer: str = described(
        "JSON Pointer (RFC 6901) into the body sent; empty for the body as a whole.",
        unit="none",
        example="/slices/0/strikes/7",
    )
    detail: str = described("What is wrong, with the limit broken.", unit="none", example="is -5.0; must be above 0")


class CheckAnswer(Answer):
    """One thing the service needs in order to take work."""

    name: str = described("What was looked at.", unit="none", example="engine")
    ok: bool = described("Whether it is in order.", unit="none", example=True)
    detail: str = described("Its state in words.", unit="none", example="warm")


class ProblemAnswer(Answer):
    """RFC 9457 problem details."""

    type: str = described(
        "Address of the page about this kind of problem.", unit="none", example="/problems/invalid-request"
    )
    title: str = described("The kind of problem in words.", unit="none", example=KINDS["invalid-request"].title)
    status: int = described("The HTTP status code.", unit="none", example=422)
    detail: str = described(
        "This problem in words.", unit="none", example="/slices/0/strikes/7 is -5.0; must be greater than 0."
    )
    instance: str = described(
        "The id of the request, as in X-Request-Id.", unit="none", example="0c0d7b2a9a3f4c7f8a5d1e6b2c3d4e5f"
    )
    errors: list[FaultAnswer] | None = described(
        "The values at fault, the first fifty. Absent where no single value is.",
        unit="none",
        example=[{"pointer": "/slices/0/strikes/7", "detail": "is -5.0; must be greater than 0"}],
        default=None,
    )
    checks: list[CheckAnswer] | None = described(
        "What was found not ready; only in answers of /readyz.",
        unit="none",
        example=[{"name": "engine", "ok": False, "detail": "warming up"}],
        default=None,
    )


def refusals(*kinds: str) -> dict[int | str, dict[str, Any]]:
    """The ``responses`` entries for problem kinds, by status code, with their headers."""
    out: dict[int | str, dict[str, Any]] = {}
    for name in kinds:
        kind = KINDS[name]
        entry = out.setdefault(
            kind.status,
            {
                "description": "",
                "content": {MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/ProblemAnswer"}}},
            },
        )
        entry["description"] = " ".join(filter(None, [entry["description"], f"{kind.title} (/problems/{kind.name})."]))
        if kind.status == 503:
            seconds = {"type": "integer", "minimum": 1, "examples": [1], "x-unit": "seconds"}
            entry["headers"] = {"Retry-After": {"description": "When to ask again.", "schema": seconds}}
    return out
