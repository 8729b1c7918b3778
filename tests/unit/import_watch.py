"""Imports modules one by one, each in a fresh child, and reports what they did beyond importing.

Run as ``python -m tests.unit.import_watch MODULE...``; prints one JSON object, module -> list of faults. The libraries
are loaded before the first child is forked, so that a child's time is that of our own modules and what libraries do
when they are loaded is theirs. In a child an audit hook sees every file, socket, thread and process; the environment is
replaced by one that records who reads it.
"""

from __future__ import annotations

import importlib
import json
import os
import sys
import sysconfig
import threading
import traceback
from collections.abc import Iterator, MutableMapping
from types import FrameType
from typing import Any

LIBRARIES = (
    "numpy",
    "scipy.special",
    "scipy.optimize",
    "fastapi",
    "pydantic",
    "starlette",
    "uvicorn",
    "uvicorn.config",
    "httpx",
    "orjson",
    "prometheus_client",
)
ANY_ORIGIN = (
    "socket.__new__",
    "_thread.start_new_thread",
    "subprocess.Popen",
    "os.system",
    "os.fork",
    "os.posix_spawn",
)
OWN = ("engine", "service")
STDLIB = sysconfig.get_paths()["stdlib"]


def _is_own(frame: FrameType) -> bool:
    return str(frame.f_globals.get("__name__", "")).split(".")[0] in OWN


def _called_by_own(frame: FrameType | None) -> bool:
    """Whether our own code is behind the call with only the standard library between, and no import."""
    while frame is not None:
        name = frame.f_code.co_filename
        if _is_own(frame):
            return True
        if name.startswith("<frozen importlib") or "site-packages" in name:
            return False
        if not (name.startswith((STDLIB, "<frozen")) or name == __file__):
            return False
        frame = frame.f_back
    return False


class WatchedEnvironment(MutableMapping[str, str]):
    """The environment, with a note of every read that our own code makes."""

    def __init__(self, real: MutableMapping[str, str], faults: list[str]) -> None:
        self._real = real
        self._faults = faults

    def __getitem__(self, name: str) -> str:
        if _called_by_own(sys._getframe(1)):
            self._faults.append(f"reads the environment: {name}")
        return self._real[name]

    def __iter__(self) -> Iterator[str]:
        if _called_by_own(sys._getframe(1)):
            self._faults.append("reads the environment")
        return iter(self._real)

    def __len__(self) -> int:
        return len(self._real)

    def __setitem__(self, name: str, value: str) -> None:
        if _called_by_own(sys._getframe(1)):
            self._faults.append(f"changes the environment: {name}")
        self._real[name] = value

    def __delitem__(self, name: str) -> None:
        del self._real[name]


def _hook(faults: list[str]) -> Any:
    def hook(event: str, args: tuple[Any, ...]) -> None:
        if event in ANY_ORIGIN:
            faults.append(f"{event} {args!r:.80}")
        elif event == "open":
            path, mode, flags = args
            writes = isinstance(flags, int) and flags & (os.O_WRONLY | os.O_RDWR | os.O_CREAT | os.O_APPEND)
            if writes:
                faults.append(f"writes a file: {path}")
            elif _called_by_own(sys._getframe(1)):
                faults.append(f"reads a file: {path}")

    return hook


def _watch_threads(faults: list[str]) -> None:
    """Note every thread that is started: not every Python has an audit event for it."""
    start = threading.Thread.start

    def noted(thread: threading.Thread) -> None:
        faults.append(f"starts a thread: {thread.name}")
        start(thread)

    threading.Thread.start = noted  # type: ignore[method-assign]


def _watch(module: str) -> list[str]:
    """Import one module here and say what it did."""
    faults: list[str] = []
    os.environ = WatchedEnvironment(os.environ, faults)  # type: ignore[assignment]  # noqa: B003  (its reads are to be seen)
    _watch_threads(faults)
    sys.addaudithook(_hook(faults))
    try:
        importlib.import_module(module)
    except BaseException:
        return ["does not import: " + traceback.format_exc(limit=-3)]
    found = list(faults)
    if threading.active_count() != 1:
        found.append(f"leaves {threading.active_count() - 1} threads")
    return found


def _in_child(module: str) -> list[str]:
    out, into = os.pipe()
    child = os.fork()
    if child == 0:
        os.close(out)
        with os.fdopen(into, "w") as pipe:
            pipe.write(json.dumps(_watch(module)))
            pipe.flush()
            os._exit(0)
    os.close(into)
    with os.fdopen(out) as pipe:
        answer = pipe.read()
    os.waitpid(child, 0)
    return list(json.loads(answer)) if answer else ["ended the process"]


def main(names: list[str]) -> None:
    sys.dont_write_bytecode = True
    for library in LIBRARIES:
        importlib.import_module(library)
    mine = [name for name in sys.modules if name.split(".")[0] in OWN]
    if mine:
        raise SystemExit(f"already loaded before the first import: {mine}")
    print(json.dumps({name: _in_child(name) for name in names}))


if __name__ == "__main__":
    main(sys.argv[1:])
