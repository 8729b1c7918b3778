"""``/``, ``/docs``, ``/openapi.json``, ``/problems`` and the files they refer to. Nothing is fetched from elsewhere."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Awaitable, Callable, Mapping
from html import escape
from string import Template
from typing import Any, Final

from fastapi import APIRouter, Request
from starlette.exceptions import HTTPException
from starlette.responses import HTMLResponse, Response

from service import version
from service.array_route import DirectRoute
from service.encoding import encode
from service.pages.assets import load_assets, page_text
from service.problems import KINDS, ProblemKind

__all__ = ["add_pages"]

Handler = Callable[[Request], Awaitable[Response]]
_PAGE: Final = {"Content-Security-Policy": "default-src 'none'; style-src 'self'; img-src 'self' data:"}
# The interactive page sets styles on elements and sends requests to this service.
_DOCS: Final = {
    "Content-Security-Policy": "default-src 'none'; script-src 'self'; style-src 'self' 'unsafe-inline'; "
    "img-src 'self' data:; connect-src 'self'"
}


def add_pages(router: APIRouter, *, openapi: Callable[[], dict[str, Any]], example: Mapping[str, Any]) -> None:
    """Everything a browser shows. ``example`` is the first request that the start page suggests."""
    for path, handler in (
        ("/", _start(example)),
        ("/docs", _fixed(HTMLResponse(page_text("docs.html"), headers=_DOCS))),
        ("/openapi.json", _openapi(openapi)),
        ("/problems", _fixed(HTMLResponse(_problems(), headers=_PAGE))),
        ("/problems/{name}", _problem()),
        ("/assets/{name}", _asset()),
    ):
        router.add_api_route(
            path,
            handler,
            methods=["GET"],
            include_in_schema=False,
            response_model=None,
            route_class_override=DirectRoute,
        )


def _fixed(response: Response) -> Handler:
    async def handler(_request: Request) -> Response:
        return response

    return handler


def _start(example: Mapping[str, Any]) -> Handler:
    page = Template(page_text("start.html"))
    fields = ",\n    ".join(f"{json.dumps(name)}: {json.dumps(value)}" for name, value in example.items())
    body = escape("{\n    " + fields + "\n  }", quote=False)

    async def handler(request: Request) -> Response:
        base = escape(str(request.base_url).rstrip("/"))
        text = page.substitute(version=escape(version()), base=base, example=body)
        return HTMLResponse(text, headers=_PAGE)

    return handler


def _openapi(openapi: Callable[[], dict[str, Any]]) -> Handler:
    async def handler(_request: Request) -> Response:
        return Response(encode(openapi()), media_type="application/json")

    return handler


def _problems() -> str:
    def row(kind: ProblemKind) -> str:
        return (
            f'<tr><td><a href="/problems/{kind.name}">/problems/{kind.name}</a></td>'
            f"<td>{kind.status}</td><td>{escape(kind.title)}</td></tr>"
        )

    rows = "\n".join(row(kind) for kind in sorted(KINDS.values(), key=lambda kind: kind.status))
    return Template(page_text("problems.html")).substitute(rows=rows)


def _problem() -> Handler:
    page = Template(page_text("problem.html"))

    async def handler(request: Request) -> Response:
        kind = KINDS.get(request.path_params["name"])
        if kind is None:
            raise HTTPException(404)
        text = page.substitute(
            name=kind.name,
            status=kind.status,
            title=escape(kind.title),
            meaning=escape(kind.meaning),
            remedy=escape(kind.remedy),
        )
        return HTMLResponse(text, headers=_PAGE)

    return handler


def _asset() -> Handler:
    assets = load_assets()
    tags = {name: f'"{hashlib.sha256(asset.body).hexdigest()[:32]}"' for name, asset in assets.items()}

    async def handler(request: Request) -> Response:
        name = request.path_params["name"]
        if name not in assets:
            raise HTTPException(404)
        headers = {"ETag": tags[name], "Cache-Control": "no-cache"}  # kept, and asked about each time
        if tags[name] in request.headers.get("if-none-match", ""):
            return Response(status_code=304, headers=headers)
        return Response(assets[name].body, media_type=assets[name].media_type, headers=headers)

    return handler
