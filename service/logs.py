"""Structured logs: one JSON object a line on standard error, set up by the command line only."""

from __future__ import annotations

import logging
import sys
import traceback
from datetime import UTC, datetime
from typing import Any

import orjson

__all__ = ["LOGGER", "JsonLines", "log_to_standard_error"]

LOGGER = logging.getLogger("smilewright")


class JsonLines(logging.Formatter):
    """A record as one JSON object: time, level, message and the fields given as ``extra={"fields": {...}}``."""

    def format(self, record: logging.LogRecord) -> str:
        line: dict[str, Any] = {
            "time": datetime.fromtimestamp(record.created, UTC).isoformat(timespec="milliseconds"),
            "level": record.levelname.lower(),
            "message": record.getMessage(),
            **getattr(record, "fields", {}),
        }
        if record.exc_info:
            line["traceback"] = "".join(traceback.format_exception(*record.exc_info))
        return orjson.dumps(line, default=str).decode()


def log_to_standard_error(level: str) -> None:
    """Send this service's and the server's records to standard error as JSON lines."""
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(JsonLines())
    for name in ("smilewright", "uvicorn"):
        logger = logging.getLogger(name)
        logger.handlers[:] = [handler]
        logger.setLevel(level.upper())
        logger.propagate = False
