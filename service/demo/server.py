"""A real server on a free loopback port for as long as a block runs."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager

import uvicorn

from service.app import create_app
from service.server import listen, server_options
from service.settings import Settings

__all__ = ["running_server"]

_PATIENCE = 30.0  # seconds for the server to start


@contextmanager
def running_server(settings: Settings) -> Iterator[str]:
    """Serve in a thread of this process; gives the base address. Stops and waits at the end."""
    bound = listen("127.0.0.1", 0)
    options = server_options(settings) | {"log_config": None}
    server = uvicorn.Server(uvicorn.Config(create_app(settings), **options))
    thread = threading.Thread(target=server.run, kwargs={"sockets": [bound]}, name="demo-server")
    thread.start()
    try:
        deadline = time.monotonic() + _PATIENCE
        while not server.started and thread.is_alive() and time.monotonic() < deadline:
            time.sleep(0.01)
        if not server.started:
            raise RuntimeError("the server did not start")
        yield f"http://127.0.0.1:{bound.getsockname()[1]}"
    finally:
        server.should_exit = True
        thread.join()
        bound.close()
