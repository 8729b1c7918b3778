"""Write the OpenAPI document and one runnable example per operation into ``openapi/``, or check them for drift.

``python -m service.openapi_export`` writes, ``python -m service.openapi_export --check`` compares and exits 1 where the
files are not what the service says. An example is a request: method, path, headers, body.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any, Final

from service.app import create_app
from service.settings import Settings

__all__ = ["contract_files", "main"]

_FOLDER: Final = Path(__file__).resolve().parents[1] / "openapi"


def contract_files() -> dict[str, str]:
    """Every file of the contract: its path under ``openapi/`` and its text."""
    document = create_app(Settings()).openapi()
    files = {"openapi.json": _text(document)}
    for path, operations in document["paths"].items():
        for method, operation in operations.items():
            example = _example(method, path, operation)
            files[f"examples/{operation['operationId']}.json"] = _text(example)
    return files


def _example(method: str, path: str, operation: dict[str, Any]) -> dict[str, Any]:
    """The request that an operation's documentation suggests."""
    example: dict[str, Any] = {"method": method.upper(), "path": path, "headers": {}}
    body = operation.get("requestBody")
    if body is not None:
        ((kind, content),) = body["content"].items()
        example["headers"]["Content-Type"] = kind
        example["body"] = content["example"]
    return example


def _text(value: Any) -> str:
    return json.dumps(value, indent=1, ensure_ascii=False) + "\n"


def _write(files: dict[str, str]) -> None:
    for name, text in files.items():
        path = _FOLDER / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")
    for path in sorted(_FOLDER.rglob("*.json")):
        if path.relative_to(_FOLDER).as_posix() not in files:
            path.unlink()


def _drift(files: dict[str, str]) -> list[str]:
    """Names of files that are missing, different, or not of the contract."""
    there = {path.relative_to(_FOLDER).as_posix(): path.read_text(encoding="utf-8") for path in _FOLDER.rglob("*.json")}
    return sorted(name for name in files.keys() | there.keys() if files.get(name) != there.get(name))


def main(arguments: Sequence[str] | None = None) -> int:
    """Exit code: 0 done or no drift, 1 drift, 2 wrong arguments."""
    parser = argparse.ArgumentParser(prog="python -m service.openapi_export", description="Write the HTTP contract.")
    parser.add_argument("--check", action="store_true", help="compare instead of writing")
    check = parser.parse_args(arguments).check
    files = contract_files()
    if not check:
        _write(files)
        print(f"{len(files)} files written to openapi/")
        return 0
    changed = _drift(files)
    if changed:
        names = ", ".join(changed)
        print(f"openapi/ is not what the service says: {names}; run this without --check", file=sys.stderr)
        return 1
    print(f"openapi/ is what the service says: {len(files)} files")
    return 0


if __name__ == "__main__":
    sys.exit(main())
