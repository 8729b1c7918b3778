"""The routes that every kind of job has: submit, look up, follow, cancel, list."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final, Generic, TypeVar

from fastapi import APIRouter, Request
from starlette.responses import Response, StreamingResponse

from service.array_route import DirectRoute, json_body, wants_json
from service.documentation import refusals
from service.encoding import encode
from service.fields import Asked
from service.jobs.desk import Desk
from service.jobs.events import END, events
from service.jobs.headers import cursor_of, idempotency_key, listing, owner_of, wait_seconds
from service.jobs.kinds import JobKind
from service.jobs.schemas import JobAnswer, JobListAnswer
from service.jobs.store import Job
from service.jobs.views import job_body, job_path, job_summary
from service.settings import Settings
from service.telemetry import record_of
from service.validation import parse

__all__ = ["JobOperations", "add_job_routes", "job_parameter"]

Request_ = TypeVar("Request_", bound=Asked)
_SMALL_BODY: Final = 32 * 1024
_SUBMIT_REFUSALS: Final = (
    "not-json",
    "invalid-header",
    "not-acceptable",
    "body-too-large",
    "unsupported-media-type",
    "invalid-request",
    "limit-exceeded",
    "idempotency-key-reused",
    "overloaded",
    "jobs-unavailable",
)
_COMMON: Final = ("no-such-job", "not-acceptable", "jobs-unavailable")


@dataclass(frozen=True, slots=True)
class JobOperations(Generic[Request_]):
    """What a kind of job says of itself. ``plan`` checks a request beyond its schema and counts its pieces."""

    kind: JobKind
    noun: str
    plural: str
    tag: str
    description: str
    request: type[Request_]
    answer: type[JobAnswer]
    plan: Callable[[Request_, Settings], int]
    example: dict[str, Any]

    @property
    def path(self) -> str:
        """Where the jobs of this kind are."""
        return f"/v1/{self.kind.name}"


def add_job_routes(router: APIRouter, operations: JobOperations[Request_], desk: Desk) -> None:
    """Serve one kind of job."""
    _add_submit(router, operations, desk)
    _add_find(router, operations, desk)
    _add_events(router, operations, desk)
    _add_cancel(router, operations, desk)
    _add_list(router, operations, desk)


def job_parameter(noun: str) -> dict[str, Any]:
    """The path parameter of one job, for the document."""
    return {
        "name": "id",
        "in": "path",
        "required": True,
        "description": f"Id of the {noun} job.",
        "schema": {"type": "string", "examples": ["5f0c7d1e9a4b4c86b2f3a1d0e7c69584"]},
    }


def _add_submit(router: APIRouter, operations: JobOperations[Request_], desk: Desk) -> None:
    kind, settings = operations.kind, desk.settings

    def pieces(raw: bytes) -> int:
        return operations.plan(parse(operations.request, raw), settings)

    async def submit(request: Request) -> Response:
        wants_json(request.headers)
        raw = await json_body(request, settings.max_body_bytes)
        key, wait = idempotency_key(request.headers), wait_seconds(request.headers, settings.job_wait_seconds)
        total = pieces(raw) if len(raw) <= _SMALL_BODY else await desk.prepare(lambda: pieces(raw))
        receipt = await desk.submit(kind, raw, owner=owner_of(request.headers), key=key, total=total, wait=wait)
        record_of(request.scope).engine_seconds = receipt.engine_seconds
        applied = {"Preference-Applied": f"wait={wait}"} if wait else {}
        return await _told(desk, kind, receipt.job, 200 if receipt.job.over else 202, applied)

    reference = {"$ref": f"#/components/schemas/{operations.request.__name__}"}
    location = {"Location": {"description": "Where the job is.", "schema": {"type": "string"}}}
    accepted = {"model": operations.answer, "description": "The job was accepted and is kept.", "headers": location}
    router.add_api_route(
        operations.path,
        submit,
        methods=["POST"],
        operation_id=f"submit_{operations.noun}",
        tags=[operations.tag],
        summary=f"Submit a {operations.noun} job",
        description=operations.description,
        response_model=None,
        response_description="The job is over: the caller waited, or had sent it before.",
        responses={
            200: {"model": operations.answer, "headers": location},
            202: accepted,
            **refusals(*_SUBMIT_REFUSALS),
        },
        route_class_override=DirectRoute,
        openapi_extra={
            "parameters": _SUBMIT_HEADERS,
            "requestBody": {
                "required": True,
                "content": {"application/json": {"schema": reference, "example": operations.example}},
            },
        },
    )


def _add_find(router: APIRouter, operations: JobOperations[Request_], desk: Desk) -> None:
    kind = operations.kind

    async def find(request: Request) -> Response:
        wants_json(request.headers)
        job = await desk.find(kind, request.path_params["id"], owner=owner_of(request.headers))
        return await _told(desk, kind, job, 200, {})

    router.add_api_route(
        operations.path + "/{id}",
        find,
        methods=["GET"],
        operation_id=f"get_{operations.noun}",
        tags=[operations.tag],
        summary=f"Look up a {operations.noun} job",
        description="Its state, its progress, and its result once it has succeeded.",
        response_model=None,
        response_description="The job.",
        responses={200: {"model": operations.answer}, **refusals(*_COMMON)},
        route_class_override=DirectRoute,
        openapi_extra={"parameters": [job_parameter(operations.noun)]},
    )


def _add_cancel(router: APIRouter, operations: JobOperations[Request_], desk: Desk) -> None:
    kind = operations.kind

    async def cancel(request: Request) -> Response:
        wants_json(request.headers)
        job = await desk.find(kind, request.path_params["id"], owner=owner_of(request.headers))
        ended = job if job.over else await desk.ask(lambda: desk.store.cancel(job))
        return await _told(desk, kind, ended, 200, {})

    router.add_api_route(
        operations.path + "/{id}",
        cancel,
        methods=["DELETE"],
        operation_id=f"cancel_{operations.noun}",
        tags=[operations.tag],
        summary=f"Cancel a {operations.noun} job",
        description="Ends a queued or running job; one that is over stays as it is.",
        response_model=None,
        response_description="The job as it is now: cancelled, unless it was over before.",
        responses={200: {"model": operations.answer}, **refusals(*_COMMON)},
        route_class_override=DirectRoute,
        openapi_extra={"parameters": [job_parameter(operations.noun)]},
    )


def _add_events(router: APIRouter, operations: JobOperations[Request_], desk: Desk) -> None:
    kind = operations.kind

    async def follow(request: Request) -> Response:
        job = await desk.find(kind, request.path_params["id"], owner=owner_of(request.headers))
        seen = request.headers.get("last-event-id")
        if seen == END:
            return Response(status_code=204)
        stream = events(desk, kind, job, seen=seen)
        return StreamingResponse(stream, media_type="text/event-stream", headers={"Cache-Control": "no-store"})

    router.add_api_route(
        operations.path + "/{id}/events",
        follow,
        methods=["GET"],
        operation_id=f"follow_{operations.noun}",
        tags=[operations.tag],
        summary=f"Follow a {operations.noun} job",
        description="Server-sent events: progress whenever it changes, with {done, total, status}; then end, with the "
        "job without its result. Last-Event-ID resumes; after end the answer is 204.",
        response_model=None,
        response_class=StreamingResponse,
        responses={
            200: {"description": "The events.", "content": {"text/event-stream": {"schema": {"type": "string"}}}},
            204: {"description": "The end was heard before."},
            **refusals("no-such-job", "jobs-unavailable"),
        },
        route_class_override=DirectRoute,
        openapi_extra={
            "parameters": [
                job_parameter(operations.noun),
                _parameter("header", "Last-Event-ID", "Id of the last event heard.", {"type": "string"}, "120"),
            ]
        },
    )


def _add_list(router: APIRouter, operations: JobOperations[Request_], desk: Desk) -> None:
    kind = operations.kind

    async def page(request: Request) -> Response:
        wants_json(request.headers)
        asked, owner = listing(request.query_params), owner_of(request.headers)
        found = await desk.ask(
            lambda: desk.store.page(
                kind.name, owner=owner, state=asked.state, limit=asked.limit + 1, before=asked.before
            )
        )
        shown = found[: asked.limit]
        more = cursor_of(shown[-1]) if len(found) > asked.limit else None
        body = {"jobs": [job_summary(job, kind, desk.settings) for job in shown], "next_cursor": more}
        return Response(encode(body), media_type="application/json")

    states = {"type": "string", "enum": ["queued", "running", "succeeded", "failed", "cancelled"]}
    router.add_api_route(
        operations.path,
        page,
        methods=["GET"],
        operation_id=f"list_{operations.plural}",
        tags=[operations.tag],
        summary=f"List your {operations.noun} jobs",
        description="The caller's own, the latest first, without results.",
        response_model=None,
        response_description="One page of jobs.",
        responses={200: {"model": JobListAnswer}, **refusals("not-acceptable", "invalid-query", "jobs-unavailable")},
        route_class_override=DirectRoute,
        openapi_extra={
            "parameters": [
                _parameter("query", "status", "Only jobs in this state.", states, "running"),
                _parameter(
                    "query",
                    "limit",
                    "Most jobs of a page.",
                    {"type": "integer", "minimum": 1, "maximum": 200, "default": 50},
                    50,
                ),
                _parameter("query", "cursor", "next_cursor of the page before.", {"type": "string"}, "MTc3Mz"),
            ]
        },
    )


async def _told(desk: Desk, kind: JobKind, job: Job, status: int, headers: Mapping[str, str]) -> Response:
    body = await desk.ask(lambda: job_body(job, kind, desk.settings, desk.store.blobs))
    return Response(
        body, status_code=status, media_type="application/json", headers={"Location": job_path(job), **headers}
    )


def _parameter(place: str, name: str, text: str, schema: dict[str, Any], example: Any) -> dict[str, Any]:
    shown = {**schema, "examples": [example]}
    return {"name": name, "in": place, "required": False, "description": text, "schema": shown}


_SUBMIT_HEADERS: Final = [
    _parameter(
        "header",
        "Idempotency-Key",
        "A name of your own for this submission, 1 to 255 characters: sent again with the same body, byte for byte, "
        "it gives the first job again.",
        {"type": "string", "minLength": 1, "maxLength": 255},
        "marks-2026-03-16T08:00",
    ),
    _parameter(
        "header",
        "Prefer",
        "wait=N: answer within N seconds, with 200 if the job is over by then, else with 202.",
        {"type": "string"},
        "wait=5",
    ),
]
