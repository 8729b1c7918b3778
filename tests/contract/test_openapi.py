"""The OpenAPI document: valid, complete, in step with the files in ``openapi/``; every example runs."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import httpx
import pytest
from jsonschema import Draft202012Validator

from service.demo.server import running_server
from service.jobs.pool import running_workers
from service.openapi_export import contract_files, main
from service.settings import Settings
from tests.contract.contract import Contract
from tests.contract.requests import lewis

FOLDER = Path(__file__).parents[2] / "openapi"
EXAMPLES = sorted((FOLDER / "examples").glob("*.json"))


def test_the_files_are_what_the_service_says(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--check"]) == 0, capsys.readouterr().err


def test_drift_is_seen(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    changed = {**contract_files(), "openapi.json": "{}\n", "examples/one_more.json": "{}\n"}
    monkeypatch.setattr("service.openapi_export.contract_files", lambda: changed)
    assert main(["--check"]) == 1
    said = capsys.readouterr().err
    assert "openapi.json" in said and "examples/one_more.json" in said


def test_the_document_served_is_the_document_written(client: httpx.Client) -> None:
    assert client.get("/openapi.json").json() == json.loads((FOLDER / "openapi.json").read_text(encoding="utf-8"))


def _operations(document: dict[str, Any]) -> Iterator[tuple[str, str, dict[str, Any]]]:
    for path, methods in document["paths"].items():
        for method, operation in methods.items():
            yield method, path, operation


def test_every_operation_is_described_and_has_an_example(contract: Contract) -> None:
    assert contract.document["openapi"] == "3.1.0"
    operations = list(_operations(contract.document))
    assert {f"{method} {path}" for method, path, _ in operations} >= {
        "post /v1/smiles",
        "post /v1/greeks",
        "post /v1/implied-vols",
        "post /v1/chains",
        "get /v1/models",
        "get /healthz",
        "get /readyz",
        "get /metrics",
    }
    tags = {tag["name"] for tag in contract.document["tags"]}
    for _, _, operation in operations:
        assert operation["summary"] and operation["description"] and set(operation["tags"]) <= tags
    assert {path.stem for path in EXAMPLES} == {operation["operationId"] for _, _, operation in operations}


def test_every_field_says_what_it_is(contract: Contract) -> None:
    """A description, a unit and an example that fits the field's own schema, for every field of every object."""
    components = {"components": contract.document["components"]}
    fields = 0
    for name, schema in contract.document["components"]["schemas"].items():
        assert schema.get("description"), name
        assert schema["additionalProperties"] is False, name
        for field, said in schema["properties"].items():
            fields += 1
            place = f"{name}.{field}"
            assert said.get("description"), place
            assert said.get("x-unit"), place
            assert said.get("examples"), place
            for example in said["examples"]:
                Draft202012Validator({**components, **said}).validate(example)
    assert fields > 80


def test_every_schema_is_a_schema_and_every_reference_leads_somewhere(contract: Contract) -> None:
    for schema in contract.document["components"]["schemas"].values():
        Draft202012Validator.check_schema(schema)

    def references(part: Any) -> Iterator[str]:
        if isinstance(part, dict):
            if "$ref" in part:
                yield part["$ref"]
            for value in part.values():
                yield from references(value)
        elif isinstance(part, list):
            for value in part:
                yield from references(value)

    known = {f"#/components/schemas/{name}" for name in contract.document["components"]["schemas"]}
    used = set(references(contract.document))
    assert used <= known
    nested = {ref for ref in known if ref not in used}
    assert nested == set()


@pytest.fixture(scope="module")
def with_jobs(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Contract]:
    """A server with a store of its own and a worker, ready."""
    settings = Settings(data_dir=str(tmp_path_factory.mktemp("jobs")), access_log=False)
    with running_workers(settings, 1), running_server(settings) as base, httpx.Client(base_url=base) as client:
        while client.get("/v1/calibrations").status_code == 503 or client.get("/readyz").status_code == 503:
            pass
        yield Contract(client, client.get("/openapi.json").json())


def _send(contract: Contract, example: dict[str, Any], **headers: str) -> httpx.Response:
    content = json.dumps(example["body"]).encode() if "body" in example else None
    said = {**example["headers"], **headers}
    return contract.client.request(example["method"], example["path"], headers=said, content=content, timeout=60.0)


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_every_example_runs(with_jobs: Contract, path: Path) -> None:
    """Sent as the file says, answered 200 or 202, and the answer fits the document. Where an example is about a job,
    the example that submits one makes it."""
    example = json.loads(path.read_text(encoding="utf-8"))
    template = example["path"]
    if "{id}" in template:
        submitted = json.loads((path.parent / "submit_calibration.json").read_text(encoding="utf-8"))
        job = _send(with_jobs, submitted, Prefer="wait=30").json()
        assert job["status"] == "succeeded"
        example["path"] = template.replace("{id}", job["id"])
    answer = _send(with_jobs, example)
    assert answer.status_code == (202 if path.stem == "submit_calibration" else 200), answer.text
    with_jobs.hold(answer, example["method"].lower(), template)


def test_the_example_of_every_model_runs(contract: Contract) -> None:
    """One whole ``model`` object per model in the document, sent to both pricing resources."""
    schemas = contract.document["components"]["schemas"]
    union = schemas["SmilesAsked"]["properties"]["model"]["discriminator"]["mapping"]
    said = [model["name"] for model in contract.client.get("/v1/models").json()["models"]]
    assert sorted(union) == sorted(said)
    for name, reference in union.items():
        (example,) = schemas[reference.rpartition("/")[2]]["examples"]
        assert example["name"] == name
        for path in ("/v1/smiles", "/v1/greeks"):
            (found,) = contract.post(path, lewis(model=example))["slices"]
            assert found["statuses"] == ["ok"] * 5


def test_refusals_are_documented_with_their_pages(contract: Contract) -> None:
    for _, _, operation in _operations(contract.document):
        for status, answer in operation["responses"].items():
            if int(status) >= 400:
                assert list(answer["content"]) == ["application/problem+json"]
                assert "/problems/" in answer["description"]
            if status == "503":
                assert "Retry-After" in answer["headers"]
