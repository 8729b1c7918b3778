"""The OpenAPI document as a judge of answers: every answer a test asks for goes through here."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import httpx
from jsonschema import Draft202012Validator

__all__ = ["Contract", "Refusal"]


@dataclass(frozen=True)
class Refusal:
    """A problem answer: its status, the last part of its type, and the pointers with their details."""

    status: int
    kind: str
    detail: str
    faults: dict[str, str]
    answer: httpx.Response = field(repr=False)


class Contract:
    """Sends requests and holds every answer against the document."""

    def __init__(self, client: httpx.Client, document: dict[str, Any]) -> None:
        self.client = client
        self.document = document

    def post(self, path: str, body: Any, **options: Any) -> dict[str, Any]:
        """The answer of a request that must be served."""
        answer = self.client.post(path, json=body, **options)
        assert answer.status_code == 200, answer.text
        self.hold(answer, "post", path)
        return dict(answer.json())

    def refused(self, path: str, body: Any = None, **options: Any) -> Refusal:
        """The problem of a request that must be refused; ``content`` and ``headers`` for bodies that are not JSON."""
        answer = self.client.post(path, **({"json": body} if body is not None else {}), **options)
        assert answer.status_code >= 400, answer.text
        return self.problem(answer, "post", path)

    def problem(self, answer: httpx.Response, method: str, path: str) -> Refusal:
        """What a problem answer says."""
        self.hold(answer, method, path)
        said = answer.json()
        assert said["status"] == answer.status_code
        assert said["instance"] == answer.headers["X-Request-Id"]
        kind = said["type"].removeprefix("/problems/")
        faults = {fault["pointer"]: fault["detail"] for fault in said.get("errors", [])}
        return Refusal(answer.status_code, kind, said["detail"], faults, answer)

    def hold(self, answer: httpx.Response, method: str, path: str) -> None:
        """The status is documented, the media type is, and the body fits the schema; the common headers are there."""
        assert answer.headers["X-Request-Id"] and "total;dur=" in answer.headers["Server-Timing"]
        said = self.document["paths"][path][method]["responses"]
        assert str(answer.status_code) in said, f"{answer.status_code} is not documented: {answer.text:.300}"
        content = said[str(answer.status_code)]["content"]
        kind = answer.headers["Content-Type"].partition(";")[0]
        assert kind in content, f"{kind} is not documented"
        schema = {"components": self.document["components"], **content[kind]["schema"]}
        if kind.endswith("json"):
            Draft202012Validator(schema).validate(answer.json())
