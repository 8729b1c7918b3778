"""Answers as bytes."""

from __future__ import annotations

from typing import Any

import orjson

__all__ = ["encode"]


def encode(value: Any) -> bytes:
    """JSON bytes; numpy columns as they are, NaN as null."""
    return orjson.dumps(value, option=orjson.OPT_SERIALIZE_NUMPY)
