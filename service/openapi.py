"""The OpenAPI 3.1 document: the framework's, with the request models of array routes and the problem schema added."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final, Protocol

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi
from pydantic.json_schema import models_json_schema

from service.documentation import TAGS, ProblemAnswer
from service.fields import Asked

__all__ = ["document"]

_REFERENCE: Final = "#/components/schemas/{model}"
_DESCRIPTION: Final = """\
Option chains to forwards and implied volatilities; models to whole smiles, with an error bound beside every price.

Rates, volatilities and yields are decimals per year (0.05 is 5 %), times are years, prices are in the unit of spot or
forward per one unit of the underlying. Arrays are columns, one per quantity, in the order of the strikes sent. A number
that does not exist is null, with a status beside it. Unknown fields are refused. Every refusal is
application/problem+json and names each value at fault by JSON Pointer.

Every answer carries X-Request-Id (the caller's own if it sent a sane one) and Server-Timing.

What comes out are model values, not quotes, offers or advice. Have an installation validated independently and follow
your firm's own model-risk policy before a number from here is used for trading, risk or accounts.
"""


class _HasRequest(Protocol):
    """An operation whose request model is not known to the framework."""

    @property
    def request(self) -> type[Asked]: ...


def document(app: FastAPI, operations: Sequence[_HasRequest]) -> dict[str, Any]:
    """The document, made once an app."""
    if app.openapi_schema is None:
        app.openapi_schema = _document(app, operations)
    return app.openapi_schema


def _document(app: FastAPI, operations: Sequence[_HasRequest]) -> dict[str, Any]:
    made = get_openapi(
        title=app.title,
        version=app.version,
        openapi_version="3.1.0",
        summary="Whole implied-volatility smiles with error bounds, over HTTP",
        description=_DESCRIPTION,
        routes=app.routes,
        tags=[{"name": name, "description": text} for name, text in TAGS.items()],
        license_info={"name": "Apache-2.0", "identifier": "Apache-2.0"},
    )
    schemas = made.setdefault("components", {}).setdefault("schemas", {})
    _, asked = models_json_schema(
        [(operation.request, "validation") for operation in operations], ref_template=_REFERENCE
    )
    _, told = models_json_schema([(ProblemAnswer, "serialization")], ref_template=_REFERENCE)
    schemas.update(asked["$defs"] | told["$defs"])
    made["components"]["schemas"] = dict(sorted(schemas.items()))
    for path in made["paths"].values():
        for operation in path.values():
            for answer in operation["responses"].values():
                answer["headers"] = _HEADERS | answer.get("headers", {})
    return made


_HEADERS: Final[dict[str, Any]] = {
    "X-Request-Id": {
        "description": "Id of the request in logs; the caller's own if it sent a sane one.",
        "schema": {"type": "string", "examples": ["0c0d7b2a9a3f4c7f8a5d1e6b2c3d4e5f"]},
    },
    "Server-Timing": {
        "description": "Milliseconds in the engine and in all.",
        "schema": {"type": "string", "examples": ["engine;dur=0.412, total;dur=0.655"]},
    },
}
