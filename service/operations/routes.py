"""``/healthz``, ``/readyz``, ``/metrics``: answered on the event loop, whatever is being computed."""

from __future__ import annotations

from dataclasses import asdict

from fastapi import APIRouter, Request
from prometheus_client import CONTENT_TYPE_LATEST
from starlette.responses import Response

from service import version
from service.array_route import DirectRoute
from service.documentation import refusals
from service.encoding import encode
from service.operations.readiness import Readiness
from service.operations.schemas import AliveAnswer, ReadyAnswer
from service.problems import Problem
from service.telemetry import Metrics

__all__ = ["add_operations_routes"]


def add_operations_routes(router: APIRouter, *, metrics: Metrics, readiness: Readiness) -> None:
    """Probes and metrics."""
    _add_probes(router, readiness)
    _add_metrics(router, metrics)


def _add_probes(router: APIRouter, readiness: Readiness) -> None:
    alive = encode({"status": "alive", "version": version()})

    async def healthz(_request: Request) -> Response:
        return Response(alive, media_type="application/json")

    async def readyz(_request: Request) -> Response:
        checks = [asdict(check) for check in readiness.checks()]
        wrong = [f"{check['name']} {check['detail']}" for check in checks if not check["ok"]]
        if wrong:
            raise Problem(
                "not-ready",
                f"Not ready: {'; '.join(wrong)}.",
                headers={"Retry-After": str(readiness.retry_after)},
                extra={"checks": checks},
            )
        return Response(encode({"status": "ready", "checks": checks}), media_type="application/json")

    router.add_api_route(
        "/healthz",
        healthz,
        operation_id="is_alive",
        tags=["Operations"],
        summary="Is the process alive?",
        description="Answers as long as the event loop turns, whatever is being computed.",
        response_model=None,
        response_description="The process is alive.",
        responses={200: {"model": AliveAnswer}},
        route_class_override=DirectRoute,
    )
    router.add_api_route(
        "/readyz",
        readyz,
        operation_id="is_ready",
        tags=["Operations"],
        summary="Can the service take work?",
        description="Ready once the engine has priced a published smile; not while stopping or with a full queue.",
        response_model=None,
        response_description="The service can take work.",
        responses={200: {"model": ReadyAnswer}, **refusals("not-ready")},
        route_class_override=DirectRoute,
    )


def _add_metrics(router: APIRouter, metrics: Metrics) -> None:
    async def scrape(_request: Request) -> Response:
        return Response(metrics.text(), headers={"Content-Type": CONTENT_TYPE_LATEST})

    router.add_api_route(
        "/metrics",
        scrape,
        operation_id="get_metrics",
        tags=["Operations"],
        summary="Metrics for Prometheus",
        description="Requests, times, strikes, transform nodes, problems and the queue, in Prometheus' text format.",
        response_model=None,
        response_class=Response,
        responses={
            200: {
                "description": "The metrics of this process.",
                "content": {"text/plain": {"schema": {"type": "string"}}},
            }
        },
        route_class_override=DirectRoute,
    )
