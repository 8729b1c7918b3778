"""What callers say about jobs beside the body: headers and query."""

from __future__ import annotations

import base64
import binascii
import re
from dataclasses import dataclass
from typing import Final, get_args

from starlette.datastructures import Headers, QueryParams

from service.jobs.store import Job, Place, State
from service.problems import Problem

__all__ = ["ANONYMOUS", "Listing", "cursor_of", "idempotency_key", "listing", "owner_of", "wait_seconds"]

ANONYMOUS: Final = "anonymous"
_KEY: Final = re.compile(r"[\x21-\x7e]([\x20-\x7e]{0,253}[\x21-\x7e])?")
_WAIT: Final = re.compile(r"(?:^|[,;\s])wait\s*=\s*\"?(\d{1,9})\"?(?=$|[,;\s])", re.IGNORECASE)
_CURSOR: Final = re.compile(r"(\d{1,15}):(\d{1,15}):([0-9a-f]{32})")
_MOST: Final = 200
_USUAL: Final = 50


def owner_of(_headers: Headers) -> str:
    """Whose jobs these are. Without keys everybody on this machine is the same caller."""
    return ANONYMOUS


def idempotency_key(headers: Headers) -> str | None:
    """The Idempotency-Key, or None; raises Problem for one that cannot be kept."""
    given = headers.get("idempotency-key")
    if given is None:
        return None
    if not _KEY.fullmatch(given):
        raise Problem("invalid-header", "Idempotency-Key must be 1 to 255 printable characters of ASCII.")
    return given


def wait_seconds(headers: Headers, most: int) -> int:
    """Seconds that the caller wants to wait (RFC 7240, section 4.3), at most ``most``; 0 where it does not say."""
    found = _WAIT.search(headers.get("prefer", ""))
    return min(int(found[1]), most) if found else 0


@dataclass(frozen=True, slots=True)
class Listing:
    """Which jobs to list. ``before``: the place of the last one seen."""

    state: State | None
    limit: int
    before: Place | None


def listing(query: QueryParams) -> Listing:
    """The query of a list; raises Problem for what it cannot mean."""
    for name in query:
        if name not in ("status", "limit", "cursor"):
            raise Problem("invalid-query", f"{name[:40]} is not a parameter here; there are status, limit and cursor.")
    state = query.get("status")
    if state is not None and state not in get_args(State):
        raise Problem("invalid-query", f"status must be one of {', '.join(get_args(State))}.")
    limit = query.get("limit", str(_USUAL))
    if not re.fullmatch(r"\d{1,4}", limit) or not 1 <= int(limit) <= _MOST:
        raise Problem("invalid-query", f"limit must be a whole number from 1 to {_MOST}.")
    return Listing(state, int(limit), _place(query.get("cursor")))  # type: ignore[arg-type]


def cursor_of(job: Job) -> str:
    """The cursor that goes on after a job."""
    return base64.urlsafe_b64encode(":".join(map(str, job.place)).encode()).decode().rstrip("=")


def _place(cursor: str | None) -> Place | None:
    if cursor is None:
        return None
    try:
        text = base64.urlsafe_b64decode(cursor + "=" * (-len(cursor) % 4)).decode("ascii")
    except (binascii.Error, ValueError):
        text = ""
    found = _CURSOR.fullmatch(text)
    if found is None:
        raise Problem("invalid-query", "cursor must be the next_cursor of an earlier page.")
    return int(found[1]), int(found[2]), found[3]
