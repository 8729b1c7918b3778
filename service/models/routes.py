"""``GET /v1/models``."""

from __future__ import annotations

from fastapi import APIRouter, Request
from starlette.responses import Response

from service.array_route import DirectRoute, wants_json
from service.documentation import refusals
from service.encoding import encode
from service.models.mapping import models_answer
from service.models.schemas import ModelsAnswer

__all__ = ["add_models_route"]


def add_models_route(router: APIRouter) -> None:
    """The list of models, encoded once."""
    body = encode(models_answer())

    async def models(request: Request) -> Response:
        wants_json(request.headers)
        return Response(body, media_type="application/json")

    router.add_api_route(
        "/v1/models",
        models,
        operation_id="list_models",
        tags=["Reference"],
        summary="Every model with its parameters, ranges, units and source",
        description=(
            "What /v1/smiles and /v1/greeks take, and which outputs, Greeks and sensitivities each model has. Outside "
            "a range a request is refused, with the range in the answer."
        ),
        response_model=None,
        response_description="Every model of this service.",
        responses={200: {"model": ModelsAnswer}, **refusals("not-acceptable")},
        route_class_override=DirectRoute,
    )
