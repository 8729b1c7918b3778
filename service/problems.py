"""What can go wrong, and the only table from exceptions to HTTP answers (RFC 9457, ``application/problem+json``).

A kind of problem has a page of its own under ``/problems/<name>``, made from this table; its address is the ``type``
of the answer. Faults name the value by a JSON Pointer (RFC 6901) into the body sent.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import orjson
from starlette.exceptions import HTTPException
from starlette.responses import Response

from engine import EngineError, RefusedError

__all__ = [
    "KINDS",
    "MEDIA_TYPE",
    "MOST_FAULTS",
    "Fault",
    "Problem",
    "ProblemKind",
    "as_problem",
    "over_limit",
    "pointer",
    "problem_answer",
]

MEDIA_TYPE: Final = "application/problem+json"
MOST_FAULTS: Final = 50  # listed in one answer; the detail says how many there are


@dataclass(frozen=True, slots=True)
class ProblemKind:
    """One row of the table. ``meaning`` and ``remedy`` are what its page says."""

    name: str
    status: int
    title: str
    meaning: str
    remedy: str


KINDS: Final[dict[str, ProblemKind]] = {
    kind.name: kind
    for kind in (
        ProblemKind(
            "not-json",
            400,
            "The body is not JSON",
            "The body could not be read as JSON in UTF-8. The detail says what was expected, and where.",
            "Send one JSON object. NaN and Infinity are read so that they can be pointed at, but are refused: "
            "a number that does not exist is null.",
        ),
        ProblemKind(
            "not-found",
            404,
            "There is nothing at this address",
            "No resource of this service has the path asked for.",
            "The start page and /openapi.json list every path. Paths have no slash at the end.",
        ),
        ProblemKind(
            "method-not-allowed",
            405,
            "The resource does not have this method",
            "The path exists, but not with the method used.",
            "The Allow header of the answer lists the methods that it has.",
        ),
        ProblemKind(
            "not-acceptable",
            406,
            "The answer cannot be given in a form you accept",
            "The Accept header excludes the only form this resource has.",
            "Send Accept: application/json, or leave the header out.",
        ),
        ProblemKind(
            "body-too-large",
            413,
            "The body is too large",
            "The body has more bytes than the setting SMILEWRIGHT_MAX_BODY_BYTES admits. It was not looked at.",
            "Send fewer slices or strikes per request, or ask whoever runs the service for a higher limit.",
        ),
        ProblemKind(
            "unsupported-media-type",
            415,
            "The body is of a type that is not read here",
            "The body must be application/json in UTF-8, not compressed.",
            "Send Content-Type: application/json and no Content-Encoding.",
        ),
        ProblemKind(
            "invalid-request",
            422,
            "The request was understood and is impossible",
            "One or more values are missing, of the wrong type, unknown, or outside what is admitted. Each entry of "
            "errors names one value by JSON Pointer into the body sent, and the limit broken.",
            "Correct the values pointed at. A pointer such as /slices/0/strikes/7 means: slice 0, its strike 7, "
            "both counted from 0.",
        ),
        ProblemKind(
            "limit-exceeded",
            422,
            "The request is larger than this service takes",
            "The request is sound, but asks for more slices, strikes or transform nodes than the settings of this "
            "service admit. The entry of errors names the setting and its value.",
            "Split the request, or ask whoever runs the service for a higher limit.",
        ),
        ProblemKind(
            "overloaded",
            503,
            "The service is busy",
            "All computing threads are busy and as many requests wait as the setting SMILEWRIGHT_COMPUTE_QUEUE admits. "
            "Nothing was computed.",
            "Send the request again after the number of seconds in Retry-After.",
        ),
        ProblemKind(
            "not-ready",
            503,
            "The service cannot take work now",
            "The service is starting or stopping, or a part of it fails; checks says which. It is alive nevertheless.",
            "Ask again after the number of seconds in Retry-After, or another replica.",
        ),
        ProblemKind(
            "no-such-job",
            404,
            "There is no such job",
            "No job of yours has this id. Jobs of other callers are not told apart from jobs that do not exist; a job "
            "is forgotten when its time (expires_at) is over.",
            "List your jobs to see their ids.",
        ),
        ProblemKind(
            "no-such-surface",
            404,
            "The job has no such surface",
            "The query asks for the report of a surface that the job does not have.",
            "The id of a surface is the one it was sent with.",
        ),
        ProblemKind(
            "not-finished",
            409,
            "The job has no result",
            "What was asked for is made from the result of the job, and the job has none: it is not over yet, was "
            "cancelled, or failed.",
            "Follow the job until it has succeeded. Retry-After says when to look again where it is not over.",
        ),
        ProblemKind(
            "invalid-header",
            422,
            "A header was understood and is impossible",
            "A header of the request has a value that cannot be used. The detail names it and says what is admitted.",
            "Correct the header, or leave it out.",
        ),
        ProblemKind(
            "invalid-query",
            422,
            "The query was understood and is impossible",
            "A parameter of the query is unknown or has a value that is not admitted. The detail names it.",
            "Correct the parameter, or leave it out.",
        ),
        ProblemKind(
            "idempotency-key-reused",
            422,
            "The Idempotency-Key belongs to another body",
            "The same key came before with a body that was not the same, byte for byte. Nothing was accepted.",
            "Take a new key for a new body; send the first body to get the first job again.",
        ),
        ProblemKind(
            "jobs-unavailable",
            503,
            "The store of jobs does not answer",
            "Jobs cannot be accepted or looked up now, because the place where they are kept does not answer, or no "
            "worker has set it up yet. Accepted jobs are not lost, and whatever is no job is served as usual.",
            "Send the request again after the number of seconds in Retry-After; with an Idempotency-Key it is safe.",
        ),
        ProblemKind(
            "job-lost",
            500,
            "The job was lost",
            "The job was given up: its files are gone, or it failed each time it was begun.",
            "Submit it again, and tell whoever runs the service.",
        ),
        ProblemKind(
            "internal-error",
            500,
            "The service failed",
            "This is a defect of the service, not of the request. The cause is in its log under the request id.",
            "Report it to whoever runs the service with the X-Request-Id of the answer.",
        ),
    )
}


@dataclass(frozen=True, slots=True)
class Fault:
    """One value at fault: where it stands in the body sent, and what is wrong with it."""

    pointer: str
    detail: str


class Problem(Exception):
    """An answer other than the one asked for. ``extra`` are further members of the answer's object."""

    def __init__(
        self,
        kind: str,
        detail: str,
        *,
        faults: Sequence[Fault] = (),
        headers: dict[str, str] | None = None,
        extra: dict[str, Any] | None = None,
    ) -> None:
        super().__init__(detail)
        self.kind = KINDS[kind]
        self.detail = detail
        self.faults = tuple(faults)
        self.headers = headers or {}
        self.extra = extra or {}


def pointer(*parts: str | int) -> str:
    """JSON Pointer of a path."""
    return "".join("/" + str(part).replace("~", "~0").replace("/", "~1") for part in parts)


def over_limit(name: str, what: str, limit: int, setting: str) -> Problem:
    """The problem of a request that is larger than a setting admits."""
    detail = f"{what}; the limit is {limit} (setting SMILEWRIGHT_{setting})"
    return Problem("limit-exceeded", f"{pointer(name)} {detail}.", faults=[Fault(pointer(name), detail)])


def as_problem(error: Exception) -> Problem:
    """The table. What is not in it is a defect, and its text stays in the log."""
    if isinstance(error, Problem):
        return error
    if isinstance(error, RefusedError):
        return _pointed("limit-exceeded", error, error.allowed)
    if isinstance(error, EngineError):
        return _pointed("invalid-request", error, error.allowed)
    if isinstance(error, HTTPException):
        return _of_the_framework(error)
    return Problem("internal-error", "An unexpected fault; the log has it under the X-Request-Id of this answer.")


def problem_answer(problem: Problem, *, instance: str) -> Response:
    """The HTTP answer of a problem."""
    kind = problem.kind
    body: dict[str, Any] = {
        "type": f"/problems/{kind.name}",
        "title": kind.title,
        "status": kind.status,
        "detail": problem.detail,
        "instance": instance,
    }
    if problem.faults:
        body["errors"] = [{"pointer": f.pointer, "detail": f.detail} for f in problem.faults[:MOST_FAULTS]]
    body.update(problem.extra)
    return Response(orjson.dumps(body), status_code=kind.status, headers=problem.headers, media_type=MEDIA_TYPE)


def _pointed(kind: str, error: EngineError, allowed: str) -> Problem:
    """The engine's argument and index as a pointer: ``slices.strikes`` and (2, 7) are ``/slices/2/strikes/7``."""
    head, *rest = error.argument.split(".")
    at = pointer(head, *error.index[:1], *rest, *error.index[1:])
    words = f"{error.reason}; allowed: {allowed}" if allowed else error.reason
    return Problem(kind, f"{at} {words}.", faults=[Fault(at, words)])


def _of_the_framework(error: HTTPException) -> Problem:
    headers = dict(error.headers or {})
    if error.status_code == 404:
        return Problem("not-found", "No resource of this service has this path.", headers=headers)
    if error.status_code == 405:
        return Problem("method-not-allowed", f"The methods here are: {headers.get('Allow', '')}.", headers=headers)
    return Problem("internal-error", "An unexpected fault; the log has it under the X-Request-Id of this answer.")
