"""A listening socket and the server behind it."""

from __future__ import annotations

import ipaddress
import os
import socket
from typing import Any, Final

import uvicorn
from fastapi import FastAPI

from service.app import create_app
from service.jobs.pool import running_workers
from service.logs import log_config
from service.settings import Settings

__all__ = ["ListenError", "app_from_environment", "is_loopback", "listen", "serve", "server_options"]

_FACTORY: Final = "service.server:app_from_environment"


class ListenError(Exception):
    """The address cannot be listened on."""


def is_loopback(host: str) -> bool:
    """Whether an address is reached from this machine only."""
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return host == "localhost"


def listen(host: str, port: int) -> socket.socket:
    """A socket bound to the address; raises ListenError with the reason."""
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    bound = socket.socket(family, socket.SOCK_STREAM)
    bound.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        bound.bind((host, port))
    except OSError as error:
        bound.close()
        raise ListenError(f"cannot listen on {host}:{port}: {error.strerror or error}") from None
    return bound


def app_from_environment() -> FastAPI:
    """The app of one serving process."""
    return create_app(Settings.from_environment(os.environ))


def server_options(settings: Settings) -> dict[str, Any]:
    """How the server is run: our log, no header that names it, a bounded farewell."""
    return {
        "log_config": log_config(settings.log_level),
        "access_log": False,
        "server_header": False,
        "proxy_headers": False,
        "ws": "none",
        "timeout_graceful_shutdown": settings.shutdown_seconds,
    }


def serve(settings: Settings, bound: socket.socket) -> None:
    """Serve on a socket, with workers for jobs beside it, until told to stop; with several ``workers`` the server's own
    supervisor binds it again."""
    options = server_options(settings)
    with running_workers(settings, settings.job_workers):
        if settings.workers == 1:
            app = create_app(settings)
            server = uvicorn.Server(uvicorn.Config(app, **options))
            app.state.desk.stopping = lambda: server.should_exit
            server.run(sockets=[bound])
            return
        host, port = bound.getsockname()[:2]
        bound.close()
        uvicorn.run(_FACTORY, factory=True, host=host, port=port, workers=settings.workers, **options)
