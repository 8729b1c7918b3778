"""Worker processes kept running by the process that started them."""

from __future__ import annotations

import os
import subprocess
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Final

from service.logs import LOGGER
from service.settings import PREFIX, Settings

__all__ = ["WORKER_COMMAND", "running_workers", "worker_environment"]

WORKER_COMMAND: Final = (sys.executable, "-m", "service.job_worker")
_LOOK_SECONDS: Final = 0.5
_AGAIN_SECONDS: Final = 2.0  # between the end of a worker and the start of another in its place
_THREAD_COUNTS: Final = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


@contextmanager
def running_workers(settings: Settings, count: int, *, command: Sequence[str] = WORKER_COMMAND) -> Iterator[None]:
    """Keep ``count`` workers running while the context lasts; a worker that ends is replaced. At the end they are told
    to stop and waited for. Each has a pipe to this process as standard input, whose closing tells it of our death."""
    stop = threading.Event()
    environment = worker_environment(settings)
    places: list[subprocess.Popen[bytes]] = [_start(command, environment) for _ in range(count)]
    keeper = threading.Thread(target=_keep, args=(places, command, environment, stop), name="workers", daemon=True)
    keeper.start()
    try:
        yield
    finally:
        stop.set()
        keeper.join()
        for one in places:
            one.terminate()
        for one in places:
            _await_end(one, settings.shutdown_seconds)


def worker_environment(settings: Settings) -> dict[str, str]:
    """The environment of a worker: these settings, one thread for linear algebra."""
    ours = {name: text for name, text in os.environ.items() if not name.startswith(PREFIX)}
    ours.update(dict.fromkeys(_THREAD_COUNTS, "1"))
    for name in ("data_dir", "log_level", "job_retention_hours", "max_slices", "max_strikes", "max_nodes"):
        ours[PREFIX + name.upper()] = str(getattr(settings, name))
    ours[PREFIX + "JOB_STORE"] = settings.job_store.get_secret_value()
    return ours


def _start(command: Sequence[str], environment: dict[str, str]) -> subprocess.Popen[bytes]:
    return subprocess.Popen([*command, "--supervised"], env=environment, stdin=subprocess.PIPE, start_new_session=True)


def _keep(
    places: list[subprocess.Popen[bytes]], command: Sequence[str], environment: dict[str, str], stop: threading.Event
) -> None:
    ended: dict[int, float] = {}
    while not stop.wait(_LOOK_SECONDS):
        for place, one in enumerate(places):
            if one.poll() is None:
                continue
            if place not in ended:
                LOGGER.error("a worker ended", extra={"fields": {"exit_code": one.returncode}})
                ended[place] = time.monotonic()
            if time.monotonic() - ended[place] >= _AGAIN_SECONDS:
                del ended[place]
                _close(one)
                places[place] = _start(command, environment)


def _await_end(one: subprocess.Popen[bytes], seconds: float) -> None:
    try:
        one.wait(seconds)
    except subprocess.TimeoutExpired:
        one.kill()
        one.wait()
    _close(one)


def _close(one: subprocess.Popen[bytes]) -> None:
    if one.stdin is not None:
        one.stdin.close()
