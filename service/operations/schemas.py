"""Answers of the probes."""

from __future__ import annotations

from typing import Literal

from service.documentation import CheckAnswer
from service.fields import Answer, described

__all__ = ["AliveAnswer", "ReadyAnswer"]


class AliveAnswer(Answer):
    """The process is alive."""

    status: Literal["alive"] = described("Always alive.", unit="none", example="alive")
    version: str = described("Version of the installed service.", unit="none", example="0.1.0")


class ReadyAnswer(Answer):
    """The service can take work."""

    status: Literal["ready"] = described("Always ready; else the answer is a problem.", unit="none", example="ready")
    checks: list[CheckAnswer] = described(
        "What was looked at.", unit="none", example=[{"name": "engine", "ok": True, "detail": "warm"}]
    )
