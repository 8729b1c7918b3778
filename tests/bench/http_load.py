"""A server in a process of its own that tells its CPU time, and eight connections that keep it busy."""

from __future__ import annotations

import asyncio
import json
import multiprocessing
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from multiprocessing.connection import Connection
from typing import Any

import uvicorn

from service.server import listen, server_options
from service.settings import Settings

__all__ = ["CONNECTIONS", "Server", "requested", "serving", "sent"]

CONNECTIONS = 8


@dataclass(frozen=True)
class Server:
    """Where it listens, and the CPU seconds of its process."""

    port: int
    pipe: Connection

    def cpu(self) -> float:
        """CPU seconds so far, user and system."""
        self.pipe.send("cpu")
        return float(self.pipe.recv())


@contextmanager
def serving(make_app: Callable[[], Any]) -> Iterator[Server]:
    """One worker serving the app that ``make_app`` (a function of a module) makes, run as the service runs its own."""
    ours, theirs = multiprocessing.get_context("spawn").Pipe()
    child = multiprocessing.get_context("spawn").Process(target=_serve, args=(make_app, theirs), daemon=True)
    child.start()
    try:
        yield Server(ours.recv(), ours)
    finally:
        ours.send("end")
        child.join()
        ours.close()


def _serve(make_app: Callable[[], Any], pipe: Connection) -> None:
    bound = listen("127.0.0.1", 0)
    server = uvicorn.Server(uvicorn.Config(make_app(), **server_options(Settings()) | {"log_config": None}))

    def tell() -> None:
        while not server.started:
            time.sleep(0.01)
        pipe.send(bound.getsockname()[1])
        while pipe.recv() == "cpu":
            pipe.send(time.process_time())
        server.should_exit = True

    threading.Thread(target=tell, daemon=True).start()
    server.run(sockets=[bound])


def requested(path: str, body: dict[str, Any]) -> bytes:
    """The bytes of one POST."""
    content = json.dumps(body).encode()
    head = (
        f"POST {path} HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: {len(content)}"
    )
    return f"{head}\r\n\r\n".encode() + content


class _Caller(asyncio.Protocol):
    """One connection: sends a request when the last has been answered; gives up at the first refusal."""

    def __init__(self, waiting: Iterator[bytes], done: asyncio.Future[None]) -> None:
        self._waiting, self._done = waiting, done
        self._got, self._expected = b"", 0

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        assert isinstance(transport, asyncio.Transport)
        self._transport = transport
        self._next()

    def _next(self) -> None:
        request = next(self._waiting, None)
        if request is None:
            self._transport.close()
            self._done.set_result(None)
            return
        self._transport.write(request)

    def data_received(self, data: bytes) -> None:
        self._got += data
        if not self._expected:
            head, blank, _ = self._got.partition(b"\r\n\r\n")
            if not blank:
                return
            if not head.startswith(b"HTTP/1.1 200"):
                self._done.set_exception(RuntimeError(self._got.decode()))
                self._transport.close()
                return
            length = head.lower().partition(b"content-length: ")[2].partition(b"\r\n")[0]
            self._expected = len(head) + 4 + int(length)
        if len(self._got) >= self._expected:
            self._got, self._expected = b"", 0
            self._next()

    def connection_lost(self, exc: Exception | None) -> None:
        if not self._done.done():
            self._done.set_exception(exc or RuntimeError("the server hung up"))


async def _send(port: int, requests: Sequence[bytes], connections: int) -> None:
    loop = asyncio.get_running_loop()
    waiting = iter(requests)
    ends = [loop.create_future() for _ in range(connections)]
    for end in ends:
        await loop.create_connection(lambda end=end: _Caller(waiting, end), "127.0.0.1", port)  # type: ignore[misc]
    await asyncio.gather(*ends)


def sent(server: Server, requests: Sequence[bytes], *, connections: int = CONNECTIONS) -> None:
    """Send every request, each connection one at a time; raises RuntimeError unless all are answered 200."""
    asyncio.run(_send(server.port, requests, connections))
