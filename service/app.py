"""The application, put together in one readable function; nothing happens at import."""

from __future__ import annotations

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any, Final

from fastapi import FastAPI, Request
from starlette.exceptions import HTTPException
from starlette.responses import Response

from engine import EngineError
from service import CONTRACT_VERSION
from service.array_route import ArrayOperation, add_array_route
from service.calibrations.routes import OPERATIONS as CALIBRATIONS
from service.calibrations.routes import add_calibration_routes
from service.chains.routes import OPERATION as CHAINS
from service.compute import Compute
from service.greeks.routes import OPERATION as GREEKS
from service.implied_vols.routes import OPERATION as IMPLIED_VOLS
from service.jobs.desk import Desk
from service.models.routes import add_models_route
from service.openapi import document
from service.operations.readiness import Readiness
from service.operations.routes import add_operations_routes
from service.pages.routes import add_pages
from service.problems import Problem, as_problem, problem_answer
from service.settings import Settings
from service.smiles.routes import OPERATION as SMILES
from service.telemetry import Metrics, Telemetry, record_of

__all__ = ["ARRAY_OPERATIONS", "create_app"]

ARRAY_OPERATIONS: Final[tuple[ArrayOperation[Any], ...]] = (SMILES, GREEKS, IMPLIED_VOLS, CHAINS)


def create_app(settings: Settings) -> FastAPI:
    """The whole service. Threads start with the first work, and end when the app's lifespan does."""
    compute = Compute(settings)
    metrics = Metrics(compute)
    readiness = Readiness(settings, compute)
    desk = Desk(settings, compute)

    @asynccontextmanager
    async def lifespan(_app: FastAPI) -> AsyncIterator[None]:
        async with readiness.while_serving():
            yield
        await desk.close()
        compute.close()

    app = FastAPI(
        title="Smilewright",
        version=CONTRACT_VERSION,
        lifespan=lifespan,
        docs_url=None,
        redoc_url=None,
        openapi_url=None,
        redirect_slashes=False,
        telemetry={"tracing": False, "metrics": False, "logs": False},  # ours tells it, and each costs a look-up
    )
    app.state.desk = desk
    # 1. Outermost: ids, times, metrics, log, and what no handler expected.
    app.add_middleware(Telemetry, metrics=metrics, access_log=settings.access_log)
    # 2. Every expected fault becomes a problem answer by the one table.
    for kind in (Problem, EngineError, HTTPException):
        app.add_exception_handler(kind, _answer_problem)
    # 3. Routes, the busiest first.
    for operation in ARRAY_OPERATIONS:
        add_array_route(app.router, operation, settings=settings, compute=compute)
    add_calibration_routes(app.router, desk)
    add_models_route(app.router)
    add_operations_routes(app.router, metrics=metrics, readiness=readiness)
    add_pages(app.router, openapi=lambda: app.openapi(), example=SMILES.example)
    # 4. The OpenAPI document, made when it is first asked for.
    app.openapi = lambda: document(app, [*ARRAY_OPERATIONS, CALIBRATIONS])  # type: ignore[method-assign]
    return app


async def _answer_problem(request: Request, error: Exception) -> Response:
    record, problem = record_of(request.scope), as_problem(error)
    record.problem = problem.kind.name
    return problem_answer(problem, instance=record.request_id)
