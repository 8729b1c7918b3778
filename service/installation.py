"""What ``smilewright check`` prints: versions, cores, threads, settings, self-test."""

from __future__ import annotations

import os
import platform
import sys
from importlib import metadata
from typing import Final

from service import CONTRACT_VERSION, version
from service.self_test import run_self_test
from service.settings import PREFIX, Settings

__all__ = ["report_installation"]

_LIBRARIES: Final = ("numpy", "scipy", "fastapi", "pydantic", "uvicorn", "httpx", "orjson", "prometheus-client")
_THREAD_COUNTS: Final = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
_REPEATS: Final = 200


def report_installation(settings: Settings) -> bool:
    """Print the report; whether the self-test holds."""
    _section("Versions")
    _line("smilewright", f"{version()} (HTTP contract {CONTRACT_VERSION})")
    _line("Python", f"{platform.python_version()} on {platform.system()} {platform.machine()}")
    for name in _LIBRARIES:
        _line(name, metadata.version(name))
    _section("Cores and threads")
    _line("cores of the machine", str(os.cpu_count()))
    _line("computing threads", str(settings.compute_threads))
    for name in _THREAD_COUNTS:
        _line(name, os.environ.get(name, "not set"))
    _section("Settings (environment variables)")
    for name, field in Settings.model_fields.items():
        _line(PREFIX + name.upper(), f"{getattr(settings, name)!s:<12} {field.description}")
    _section("Self-test: Heston prices of A. Lewis, 15 February 2019")
    test = run_self_test(repeats=_REPEATS)
    _line("prices", str(test.prices))
    _line("worst difference", f"{test.worst:.1e} relative")
    _line("within its error bound", "yes, every one" if test.covered else "NO")
    _line("one smile", f"{test.milliseconds:.2f} ms, best of {_REPEATS}")
    sys.stdout.flush()
    return test.covered


def _section(title: str) -> None:
    print(f"\n{title}")


def _line(name: str, value: str) -> None:
    print(f"  {name:<32} {value}")
