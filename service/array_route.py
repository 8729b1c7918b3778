"""Array routes: body read raw and bounded, validated once, computed behind the one door, answered as encoded bytes.

The framework's own reading of bodies and encoding of answers cost several times what a smile costs, so its routing and
its documentation are used and the part between is ours. Request and answer models stand in the OpenAPI document by
reference (``service.openapi``).
"""

from __future__ import annotations

from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from typing import Any, Final, Generic, TypeVar

from fastapi import APIRouter, Request
from fastapi.routing import APIRoute
from starlette.datastructures import Headers
from starlette.requests import ClientDisconnect
from starlette.responses import Response

from service.compute import Compute, Task
from service.documentation import refusals
from service.fields import Answer, Asked
from service.problems import Problem
from service.settings import Settings
from service.telemetry import record_of
from service.validation import parse

__all__ = ["ArrayOperation", "DirectRoute", "add_array_route", "json_body", "wants_json"]

Request_ = TypeVar("Request_", bound=Asked)
_SMALL_BODY: Final = 32 * 1024  # bytes; larger bodies are validated in a computing thread
_DRAINED: Final = 16  # times the limit that is read and dropped of a body too large, so that the caller hears why
_JSON_TYPES: Final = frozenset({"application/json", "application/json;charset=utf-8", "application/json;charset=utf8"})
_REFUSALS: Final = (
    "not-json",
    "not-acceptable",
    "body-too-large",
    "unsupported-media-type",
    "invalid-request",
    "limit-exceeded",
    "overloaded",
)
_ACCEPTED: Final = frozenset({"*/*", "application/*", "application/json"})


@dataclass(frozen=True, slots=True)
class ArrayOperation(Generic[Request_]):
    """One array route. ``plan`` turns a validated request into a task, or raises Problem."""

    path: str
    operation_id: str
    tag: str
    summary: str
    description: str
    request: type[Request_]
    answer: type[Answer]
    plan: Callable[[Request_, Settings], Task]
    example: dict[str, Any]


class DirectRoute(APIRoute):
    """A route whose endpoint takes the request and gives the response, with no dependencies to solve."""

    def get_route_handler(self) -> Callable[[Request], Awaitable[Response]]:  # type: ignore[override]
        handler: Callable[[Request], Awaitable[Response]] = self.endpoint
        return handler


def add_array_route(
    router: APIRouter, operation: ArrayOperation[Request_], *, settings: Settings, compute: Compute
) -> None:
    """Serve ``operation``, documented with its models and the refusals that every array route has."""

    def prepare(raw: bytes) -> Task:
        return operation.plan(parse(operation.request, raw), settings)

    async def endpoint(request: Request) -> Response:
        wants_json(request.headers)
        raw = await json_body(request, settings.max_body_bytes)
        if len(raw) <= _SMALL_BODY:
            done = await compute.run(prepare(raw))
        else:
            done = await compute.prepare_and_run(lambda: prepare(raw))
        record_of(request.scope).computed(done)
        return Response(done.outcome.body, media_type="application/json")

    reference = {"$ref": f"#/components/schemas/{operation.request.__name__}"}
    content = {"schema": reference, "example": operation.example}
    router.add_api_route(
        operation.path,
        endpoint,
        methods=["POST"],
        operation_id=operation.operation_id,
        tags=[operation.tag],
        summary=operation.summary,
        description=operation.description,
        response_model=None,
        response_description="The columns asked for, in the order of the strikes sent.",
        responses={200: {"model": operation.answer}, **refusals(*_REFUSALS)},
        route_class_override=DirectRoute,
        openapi_extra={"requestBody": {"required": True, "content": {"application/json": content}}},
    )


def wants_json(headers: Headers) -> None:
    """Raise Problem unless the caller accepts JSON. Quality values count only where they are zero."""
    accept = headers.get("accept")
    if accept is None or accept in _ACCEPTED or not accept.strip():
        return
    for choice in accept.split(","):
        kind, *parameters = (part.strip().lower() for part in choice.split(";"))
        refused = any(p.startswith("q=") and not p[2:].strip("0.") for p in parameters)
        if kind in _ACCEPTED and not refused:
            return
    raise Problem("not-acceptable", "This resource answers application/json, which the Accept header excludes.")


async def json_body(request: Request, limit: int) -> bytes:
    """The body, which must be said to be JSON and have at most ``limit`` bytes; raises Problem."""
    _is_json(request.headers)
    return await _body(request, limit)


def _is_json(headers: Headers) -> None:
    """Raise Problem unless the body is said to be plain JSON in UTF-8."""
    kind = headers.get("content-type", "")
    if kind != "application/json" and kind.lower().replace(" ", "").replace('"', "") not in _JSON_TYPES:
        said = f"not {kind[:80]}" if kind else "and the request has no Content-Type"
        raise Problem(
            "unsupported-media-type",
            f"The body must be application/json in UTF-8, {said}.",
            headers={"Accept": "application/json"},
        )
    encoding = headers.get("content-encoding", "identity")
    if encoding.lower() != "identity":
        raise Problem(
            "unsupported-media-type",
            f"The body must not be compressed; its Content-Encoding is {encoding[:80]}.",
            headers={"Accept-Encoding": "identity"},
        )


async def _body(request: Request, limit: int) -> bytes:
    """The whole body; a larger one is refused as soon as that is known, once a bounded rest has been dropped."""
    said = request.headers.get("content-length", "")
    if said.isdecimal() and int(said) > limit:
        await _drop(request, most=_DRAINED * limit, said=int(said))
        raise _too_large(limit)
    chunks: list[bytes] = []
    size, more = 0, True
    while more:
        chunk, more = await _chunk(request)
        size += len(chunk)
        if size > limit:
            await _drop(request, most=_DRAINED * limit if more else 0, said=0)
            raise _too_large(limit)
        chunks.append(chunk)
    return chunks[0] if len(chunks) == 1 else b"".join(chunks)


async def _drop(request: Request, *, most: int, said: int) -> None:
    """Read and forget up to ``most`` bytes. A caller in mid-sending would see a broken connection instead of the
    answer; one who waits for leave to send (``Expect``) or means to send far too much is not waited for."""
    if said > most or request.headers.get("expect", "").lower() == "100-continue":
        return
    dropped, more = 0, True
    while more and dropped <= most:
        chunk, more = await _chunk(request)
        dropped += len(chunk)


async def _chunk(request: Request) -> tuple[bytes, bool]:
    """The next bytes of the body and whether there are more."""
    message = await request.receive()
    if message["type"] == "http.disconnect":
        raise ClientDisconnect
    return message.get("body", b""), message.get("more_body", False)


def _too_large(limit: int) -> Problem:
    return Problem(
        "body-too-large",
        f"The body has more than {limit} bytes, the limit of this service (setting SMILEWRIGHT_MAX_BODY_BYTES).",
        headers={"Connection": "close"},
    )
