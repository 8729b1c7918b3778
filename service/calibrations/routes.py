"""``/v1/calibrations``: the routes of every job, and the report."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any, Final

import orjson
from fastapi import APIRouter, Request
from starlette.responses import HTMLResponse, Response

from service.array_route import DirectRoute
from service.calibrations.checks import check
from service.calibrations.job import KIND
from service.calibrations.report import overview_page, surface_page
from service.calibrations.requests import EXAMPLE, CalibrationAsked
from service.calibrations.schemas import CalibrationJobAnswer
from service.documentation import refusals
from service.jobs.desk import Desk
from service.jobs.endpoints import JobOperations, add_job_routes, job_parameter
from service.jobs.headers import owner_of
from service.jobs.store import Job
from service.problems import Problem

__all__ = ["OPERATIONS", "add_calibration_routes"]

OPERATIONS: Final = JobOperations(
    kind=KIND,
    noun="calibration",
    plural="calibrations",
    tag="Jobs",
    description=(
        "Fit a model to one or many surfaces, each an option chain or volatilities. The job is kept until it is done, "
        "whatever process dies meanwhile; with Prefer: wait a single surface is usually answered at once. Per surface: "
        "parameters with standard errors and correlation, what sits on a bound, errors, share inside bid and ask, "
        "model and market at every strike, and warnings in words."
    ),
    request=CalibrationAsked,
    answer=CalibrationJobAnswer,
    plan=check,
    example=EXAMPLE,
)
# Nothing from elsewhere, no script; the styles are in the page.
_POLICY: Final = {"Content-Security-Policy": "default-src 'none'; style-src 'unsafe-inline'; img-src data:"}


def add_calibration_routes(router: APIRouter, desk: Desk) -> None:
    """Everything under /v1/calibrations."""
    add_job_routes(router, OPERATIONS, desk)

    async def report(request: Request) -> Response:
        job = await desk.find(KIND, request.path_params["id"], owner=owner_of(request.headers))
        if job.state != "succeeded":
            later = {} if job.over else {"Retry-After": str(desk.settings.retry_after)}
            raise Problem(
                "not-finished", f"The job is {job.state}; only one that succeeded has a report.", headers=later
            )
        wanted = request.query_params.get("surface")
        page = await desk.prepare(lambda: _report(desk, job, wanted))
        return HTMLResponse(page, headers=_POLICY)

    router.add_api_route(
        f"{OPERATIONS.path}/{{id}}/report",
        report,
        methods=["GET"],
        operation_id="get_calibration_report",
        tags=[OPERATIONS.tag],
        summary="A calibration to look at",
        description="One HTML page that needs nothing but itself: per expiry bid-ask bars, mids and the model's curve "
        "with the differences beneath, the term structure at the money, parameters with errors and correlation, "
        "warnings, and what was left out. Of many surfaces it is a table, from which each has its page.",
        response_model=None,
        response_class=HTMLResponse,
        response_description="The page.",
        responses={
            200: {"content": {"text/html": {"schema": {"type": "string"}}}},
            **refusals("no-such-job", "no-such-surface", "not-finished", "overloaded", "jobs-unavailable"),
        },
        route_class_override=DirectRoute,
        openapi_extra={"parameters": [job_parameter(OPERATIONS.noun), _SURFACE]},
    )


_SURFACE: Final[dict[str, Any]] = {
    "name": "surface",
    "in": "query",
    "required": False,
    "description": "Id of one surface, as it was sent.",
    "schema": {"type": "string", "examples": ["INDEX"]},
}


def _report(desk: Desk, job: Job, wanted: str | None) -> str:
    """The page of one surface, or of all."""
    blobs = desk.store.blobs
    result, body = blobs.get(job.id, "result.json"), blobs.get(job.id, f"request-{job.digest}.json")
    if result is None or body is None:
        raise Problem("no-such-job", "The files of this job were taken away.")
    surfaces = orjson.loads(result)["surfaces"]
    when = datetime.fromtimestamp(job.finished or job.created, UTC).strftime("%d %B %Y, %H:%M UTC")
    if wanted is None and len(surfaces) > 1:
        return overview_page(surfaces, job=job.id, when=when)
    found = [one for one in surfaces if wanted is None or one["id"] == wanted]
    if not found:
        raise Problem("no-such-surface", "The job has no surface with the id in the query.")
    asked = CalibrationAsked.model_validate_json(body).model_dump(exclude={"surfaces"})
    return surface_page(found[0], asked, job=job.id, when=when)
