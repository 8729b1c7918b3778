"""What is told about every request: its id, its times, its metrics, its line in the log. Pure ASGI.

Metrics live in one registry an app and keep to few label values: routes by their template, never by the path sent.
"""

from __future__ import annotations

import logging
import re
import secrets
from collections.abc import Iterable
from dataclasses import dataclass
from time import perf_counter
from typing import Final

from prometheus_client import CollectorRegistry, Counter, Gauge, Histogram, generate_latest
from starlette.requests import ClientDisconnect
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service import version
from service.compute import Compute, Done
from service.logs import LOGGER
from service.problems import as_problem, problem_answer

__all__ = ["Metrics", "Record", "Telemetry", "record_of"]

_SANE_ID: Final = re.compile(rb"[A-Za-z0-9][A-Za-z0-9._:-]{0,63}")
_TRACEPARENT: Final = re.compile(rb"([0-9a-f]{2})-([0-9a-f]{32})-([0-9a-f]{16})-[0-9a-f]{2}(-.*)?")
_SECONDS: Final = (0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0)
_KEY: Final = "smilewright.record"
_CLIENT_GONE: Final = 499  # in logs and metrics only: the caller hung up before the body was complete
_UNMATCHED: Final = "unmatched"


@dataclass(slots=True)
class Record:
    """What is noted while a request is answered. ``engine_seconds`` is None where nothing was computed."""

    request_id: str
    trace_id: str = ""
    parent_id: str = ""
    engine_seconds: float | None = None
    strikes: int = 0
    nodes: int = 0
    problem: str = ""

    def computed(self, done: Done) -> None:
        """Note what the engine did."""
        self.engine_seconds, self.strikes, self.nodes = done.seconds, done.strikes, done.outcome.nodes


def record_of(scope: Scope) -> Record:
    """The record of the request that ``scope`` belongs to."""
    record: Record = scope[_KEY]
    return record


class Metrics:
    """The Prometheus metrics of one app, in a registry of their own."""

    def __init__(self, compute: Compute) -> None:
        self.registry = CollectorRegistry()
        about = Gauge("smilewright_info", "Version of the service.", ["version"], registry=self.registry)
        about.labels(version()).set(1)
        self.requests = Counter(
            "smilewright_http_requests",
            "Requests answered.",
            ["method", "route", "status"],
            registry=self.registry,
        )
        self.seconds = Histogram(
            "smilewright_http_request_seconds",
            "Time from a request's head to its answer's head.",
            ["route"],
            registry=self.registry,
            buckets=_SECONDS,
        )
        self.engine = Histogram(
            "smilewright_engine_seconds", "Time computed.", ["route"], registry=self.registry, buckets=_SECONDS
        )
        self.strikes = Counter("smilewright_strikes", "Strikes computed.", ["route"], registry=self.registry)
        self.nodes = Counter("smilewright_transform_nodes", "Transform nodes used.", ["route"], registry=self.registry)
        self.problems = Counter(
            "smilewright_problems", "Problem answers by kind.", ["route", "problem"], registry=self.registry
        )
        held = Gauge("smilewright_compute_held", "Requests computing or waiting for it.", registry=self.registry)
        held.set_function(lambda: float(compute.held))
        most = Gauge("smilewright_compute_capacity", "Most requests that may be held.", registry=self.registry)
        most.set_function(lambda: float(compute.capacity))

        self._found: dict[tuple[str, str, int], Counter] = {}
        self._by_route: dict[str, tuple[Histogram, Histogram, Counter, Counter]] = {}

    def observe(self, record: Record, *, method: str, route: str, status: int, seconds: float) -> None:
        """Count one request. Children are kept: finding them by label costs more than counting."""
        key = (method, route, status)
        if key not in self._found:
            self._found[key] = self.requests.labels(method, route, status)
        if route not in self._by_route:
            families = (self.seconds, self.engine, self.strikes, self.nodes)
            self._by_route[route] = tuple(one.labels(route) for one in families)  # type: ignore[assignment]
        self._found[key].inc()
        total, engine, strikes, nodes = self._by_route[route]
        total.observe(seconds)
        if record.problem:
            self.problems.labels(route, record.problem).inc()
        if record.engine_seconds is not None:
            engine.observe(record.engine_seconds)
            strikes.inc(record.strikes)
            nodes.inc(record.nodes)

    def text(self) -> bytes:
        """The exposition in Prometheus' text format."""
        return generate_latest(self.registry)


class Telemetry:
    """The outermost layer: gives each request its record, and catches what no handler expected."""

    def __init__(self, app: ASGIApp, metrics: Metrics, *, access_log: bool = True) -> None:
        self._app = app
        self._metrics = metrics
        self._access_log = access_log

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        begin = perf_counter()
        record = _record(scope["headers"])
        method = scope["method"]
        if method == "HEAD":  # answered like GET in a scope of our own: the server sees HEAD and leaves out the body
            scope = {**scope, "method": "GET"}
        scope[_KEY] = record
        status, seconds = 0, 0.0

        async def send_told(message: Message) -> None:
            nonlocal status, seconds
            if message["type"] == "http.response.start":
                status, seconds = message["status"], perf_counter() - begin
                message["headers"] = [*message["headers"], *_headers(record, seconds)]
            await send(message)

        try:
            await self._app(scope, receive, send_told)
        except ClientDisconnect:  # there is nobody left to answer
            status, record.problem = _CLIENT_GONE, "client-gone"
        except Exception as error:
            LOGGER.error("unexpected fault", exc_info=error, extra={"fields": {"request_id": record.request_id}})
            if status:
                raise
            record.problem = "internal-error"
            answer = problem_answer(as_problem(error), instance=record.request_id)
            await answer(scope, receive, send_told)
        finally:
            route = getattr(scope.get("route"), "path", _UNMATCHED)
            known = method if method in _METHODS else "other"
            self._metrics.observe(record, method=known, route=route, status=status, seconds=seconds)
            if self._access_log and LOGGER.isEnabledFor(logging.INFO):
                _log(record, scope, method, status, perf_counter() - begin)


_METHODS: Final = frozenset({"GET", "HEAD", "POST", "PUT", "PATCH", "DELETE", "OPTIONS"})


def _record(headers: Iterable[tuple[bytes, bytes]]) -> Record:
    given, trace = b"", b""
    for name, value in headers:
        if name == b"x-request-id":
            given = value
        elif name == b"traceparent":
            trace = value
    request_id = given.decode() if given and _SANE_ID.fullmatch(given) else secrets.token_hex(16)
    found = _TRACEPARENT.fullmatch(trace) if trace else None
    if found is None or found[1] == b"ff" or not (found[2].strip(b"0") and found[3].strip(b"0")):
        return Record(request_id)
    return Record(request_id, found[2].decode(), found[3].decode())


def _headers(record: Record, seconds: float) -> list[tuple[bytes, bytes]]:
    timing = f"total;dur={1e3 * seconds:.3f}"
    if record.engine_seconds is not None:
        timing = f"engine;dur={1e3 * record.engine_seconds:.3f}, {timing}"
    return [
        (b"x-request-id", record.request_id.encode()),
        (b"server-timing", timing.encode()),
        (b"x-content-type-options", b"nosniff"),
    ]


def _log(record: Record, scope: Scope, method: str, status: int, seconds: float) -> None:
    fields: dict[str, str | int | float] = {
        "request_id": record.request_id,
        "method": method,
        "path": scope["path"],
        "status": status,
        "total_ms": round(1e3 * seconds, 3),
    }
    if record.trace_id:
        fields.update(trace_id=record.trace_id, parent_id=record.parent_id)
    if record.engine_seconds is not None:
        fields.update(engine_ms=round(1e3 * record.engine_seconds, 3), strikes=record.strikes, nodes=record.nodes)
    if record.problem:
        fields["problem"] = record.problem
    LOGGER.info("request", extra={"fields": fields})
