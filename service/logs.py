"""Structured logs: one JSON object a line on standard error, set up by the command line only."""

from __future__ import annotations

import logging
import traceback
from datetime import UTC, datetime
from typing import Any

import orjson

__all__ = ["LOGGER", "JsonLines", "log_config"]

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


def log_config(level: str) -> dict[str, Any]:
    """Configuration, as ``logging.config.dictConfig`` takes it: this service's and the server's records as JSON lines
    on standard error."""
    logger = {"handlers": ["lines"], "level": level.upper(), "propagate": False}
    return {
        "version": 1,
        "disable_existing_loggers": False,
        "formatters": {"json": {"()": "service.logs.JsonLines"}},
        "handlers": {"lines": {"class": "logging.StreamHandler", "formatter": "json", "stream": "ext://sys.stderr"}},
        "loggers": {"smilewright": logger, "uvicorn": logger},
    }
