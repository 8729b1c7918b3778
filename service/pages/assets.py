"""The files that pages refer to: our own, and the interactive page's from the package that carries them."""

from __future__ import annotations

from dataclasses import dataclass
from importlib.util import find_spec
from pathlib import Path
from typing import Final

__all__ = ["Asset", "load_assets", "page_text"]

_HERE: Final = Path(__file__).parent
_DOCS_SCRIPT: Final = """\
"use strict";
SwaggerUIBundle({
  url: "/openapi.json",
  dom_id: "#page",
  deepLinking: true,
  showExtensions: true,
  displayRequestDuration: true,
  defaultModelsExpandDepth: 0,
  validatorUrl: null
});
"""
_ICON: Final = (
    '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 32 32"><path d="M4 7 Q15 31 28 11" fill="none" '
    'stroke="#0b5394" stroke-width="4" stroke-linecap="round"/></svg>\n'
)


@dataclass(frozen=True, slots=True)
class Asset:
    """One file as it is sent."""

    body: bytes
    media_type: str


def page_text(name: str) -> str:
    """The text of one of our own files."""
    return (_HERE / name).read_text(encoding="utf-8")


def load_assets() -> dict[str, Asset]:
    """Every file under ``/assets``, by name."""
    static = _static_files()
    return {
        "page.css": Asset(page_text("page.css").encode(), "text/css"),
        "docs.js": Asset(_DOCS_SCRIPT.encode(), "text/javascript"),
        "favicon.svg": Asset(_ICON.encode(), "image/svg+xml"),
        "swagger-ui.css": Asset((static / "swagger-ui.css").read_bytes(), "text/css"),
        "swagger-ui-bundle.js": Asset((static / "swagger-ui-bundle.js").read_bytes(), "text/javascript"),
    }


def _static_files() -> Path:
    """The folder of static files in the installed package; the package's code is not run."""
    found = find_spec("fastapi_offline")
    if found is None or found.origin is None:
        raise RuntimeError("the package fastapi-offline, which carries the files of /docs, is not installed")
    return Path(found.origin).parent / "static"
