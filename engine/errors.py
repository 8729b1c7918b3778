"""Faults of a whole call. The engine knows no HTTP: the service maps these to problem answers.

An error carries *which* argument is at fault, *where* in it (an index path) and *what* is allowed, as
fields, so that a caller can point at the value instead of parsing a sentence. Faults of one element of a
vector never raise; they set a status for that element (see ``engine.status``).
"""

from __future__ import annotations

__all__ = ["EngineError", "InputError", "RefusedError"]


class EngineError(Exception):
    """Base of every error the engine raises on purpose.

    Attributes: ``argument`` (dotted name, e.g. ``"model.rho"`` or ``"slices.strikes"``), ``index`` (positions
    inside that argument, outermost first, empty if it is no array), ``allowed`` (the admissible range in words),
    ``reason`` (one sentence).
    """

    def __init__(self, argument: str, reason: str, *, index: tuple[int, ...] = (), allowed: str = "") -> None:
        self.argument = argument
        self.reason = reason
        self.index = index
        self.allowed = allowed
        place = "".join(f"[{i}]" for i in index)
        tail = f" (allowed: {allowed})" if allowed else ""
        super().__init__(f"{argument}{place}: {reason}{tail}")

    def __reduce__(self) -> tuple[object, ...]:
        return _rebuild, (type(self), self.argument, self.reason, self.index, self.allowed)


class InputError(EngineError):
    """The value is outside what the mathematics or the parameter box admits."""


class RefusedError(EngineError):
    """The value is meaningful but the engine refuses it: it would cost more than the stated limit."""


def _rebuild(kind: type[EngineError], argument: str, reason: str, index: tuple[int, ...], allowed: str) -> EngineError:
    return kind(argument, reason, index=index, allowed=allowed)
