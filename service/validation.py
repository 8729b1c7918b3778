"""From the bytes of a body to a request object, or to a problem that names every fault by pointer."""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Mapping
from functools import cache
from typing import Any, Final, TypeVar

from pydantic import BaseModel, ValidationError
from pydantic_core import CoreConfig, SchemaValidator

from service.problems import MOST_FAULTS, Fault, Problem, pointer

__all__ = ["parse"]

Model = TypeVar("Model", bound=BaseModel)
SMALL: Final = 64 * 1024  # bytes; a smaller body gets every fault listed, a larger one the first of each column
_SHOWN: Final = 40  # characters of a text that is quoted back


def parse(schema: type[Model], raw: bytes) -> Model:
    """The request in ``raw``; raises Problem (``not-json``, ``invalid-request``)."""
    try:
        return schema.model_validate_json(raw)
    except ValidationError as error:
        raise _problem(schema, raw, error) from None


def _problem(schema: type[BaseModel], raw: bytes, error: ValidationError) -> Problem:
    if len(raw) <= SMALL:
        try:
            _thorough(schema).validate_json(raw)
        except ValidationError as all_of_them:
            error = all_of_them
    found = error.errors(include_url=False)
    if found[0]["type"] == "json_invalid":
        return Problem("not-json", f"The body is not JSON: {found[0]['ctx']['error']}.")
    body = json.loads(raw)
    faults = [_fault(body, one) for one in found[:MOST_FAULTS]]
    if len(found) == 1:
        detail = f"{faults[0].pointer or 'The body'} {faults[0].detail}."
    else:
        some = f"; the first {MOST_FAULTS} are listed" if len(found) > MOST_FAULTS else ""
        detail = f"{len(found)} values are at fault{some}."
    return Problem("invalid-request", detail, faults=faults)


@cache
def _thorough(schema: type[BaseModel]) -> SchemaValidator:
    """The same schema without its classes, reading columns past their first fault: good for a list of faults only."""

    def without(part: Any) -> Any:
        if isinstance(part, dict):
            if part.get("type") == "model":
                return without(part["schema"])
            return {key: without(value) for key, value in part.items() if key != "fail_fast"}
        return [without(one) for one in part] if isinstance(part, list) else part

    rules = CoreConfig(strict=True, extra_fields_behavior="forbid", allow_inf_nan=False)  # those of Asked
    return SchemaValidator(without(schema.__pydantic_core_schema__), rules)


def _fault(body: Any, one: Mapping[str, Any]) -> Fault:
    """One fault in our words. The library's path holds names of alternatives too, which are no part of the body."""
    kind, here, parts = one["type"], body, list[str | int]()
    for part in one["loc"]:
        if isinstance(here, dict) and isinstance(part, str) and part in here:
            here = here[part]
        elif isinstance(here, list) and isinstance(part, int) and part < len(here):
            here = here[part]
        else:
            continue
        parts.append(part)
    if kind == "missing":
        parts.append(one["loc"][-1])
    elif kind in ("union_tag_invalid", "union_tag_not_found"):
        name = str(one["ctx"]["discriminator"]).strip("'")
        parts.append(name)
        here = here.get(name) if isinstance(here, dict) else here
    words = _WORDS.get(kind)
    limits = one.get("ctx", {})
    return Fault(pointer(*parts), words(here, limits) if words else _plain(str(one["msg"])))


def _kind_of(value: Any) -> str:
    """What a JSON value is, in words."""
    if value is None:
        return "null"
    if isinstance(value, bool):
        return "a boolean"
    if isinstance(value, str):
        return "a string"
    if isinstance(value, dict):
        return "an object"
    return "an array" if isinstance(value, list) else "a number"


def _shown(value: Any) -> str:
    text = json.dumps(value)
    return text if len(text) <= _SHOWN else text[:_SHOWN] + "..."


def _must_be(what: str) -> Callable[[Any, Mapping[str, Any]], str]:
    return lambda here, _limits: f"must be {what}, not {_kind_of(here)}"


def _bound(words: str, name: str) -> Callable[[Any, Mapping[str, Any]], str]:
    return lambda here, limits: f"is {_shown(here)}; must be {words} {limits[name]:g}"


def _length(words: str, name: str) -> Callable[[Any, Mapping[str, Any]], str]:
    return lambda here, limits: (
        f"has {limits['actual_length']} entries; {words} {limits[name]} are allowed"
        if limits["actual_length"]
        else f"is empty; {words} {limits[name]} needed"
    )


def _one_of(here: Any, limits: Mapping[str, Any]) -> str:
    allowed = limits.get("expected") or limits.get("expected_tags")
    return f"is {_shown(here)}; must be one of {allowed}"


def _plain(message: str) -> str:
    message = re.sub(r"^(Input|Value) should ", "must ", re.sub(r"^Value error, ", "", message))
    return message[:1].lower() + message[1:]


_WORDS: Final[dict[str, Callable[[Any, Mapping[str, Any]], str]]] = {
    "missing": lambda _here, _limits: "is required",
    "extra_forbidden": lambda _here, _limits: "is not a field of this object",
    "float_type": _must_be("a number"),
    "int_type": _must_be("a whole number"),
    "bool_type": _must_be("true or false"),
    "string_type": _must_be("a string"),
    "list_type": _must_be("an array"),
    "model_type": _must_be("an object"),
    "model_attributes_type": _must_be("an object"),
    "date_type": _must_be("a date YYYY-MM-DD"),
    "date_parsing": lambda here, _limits: f"is {_shown(here)}; must be a calendar date YYYY-MM-DD",
    "date_from_datetime_parsing": lambda here, _limits: f"is {_shown(here)}; must be a calendar date YYYY-MM-DD",
    "finite_number": lambda _here, _limits: "must be a finite number; NaN and Infinity are not numbers of JSON",
    "greater_than": _bound("greater than", "gt"),
    "greater_than_equal": _bound("at least", "ge"),
    "less_than": _bound("less than", "lt"),
    "less_than_equal": _bound("at most", "le"),
    "too_short": _length("at least", "min_length"),
    "too_long": _length("at most", "max_length"),
    "literal_error": _one_of,
    "union_tag_invalid": _one_of,
    "union_tag_not_found": lambda _here, _limits: "is required: it says which alternative this is",
}
