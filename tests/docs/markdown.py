"""Reading the project's own Markdown: marked blocks, tables, links, headings."""

from __future__ import annotations

import re
import shlex
from dataclasses import dataclass
from pathlib import Path

__all__ = ["DOCUMENTS", "ROOT", "Request", "anchors", "code", "links", "marked", "request", "rows"]

ROOT = Path(__file__).resolve().parents[2]
DOCUMENTS = sorted([*ROOT.glob("*.md"), *(p for d in ("docker", "openapi") for p in (ROOT / d).rglob("*.md"))])


@dataclass(frozen=True, slots=True)
class Request:
    """What a curl command sends."""

    method: str
    url: str
    headers: dict[str, str]
    body: bytes


def marked(name: str, *, document: str = "README.md") -> str:
    """The text between ``<!-- name -->`` and ``<!-- /name -->``, which stand once each."""
    text = (ROOT / document).read_text(encoding="utf-8")
    found = re.findall(rf"^<!-- {name} -->\n(.*?)^<!-- /{name} -->$", text, re.DOTALL | re.MULTILINE)
    assert len(found) == 1, f"{document} holds {len(found)} blocks marked {name}"
    return str(found[0])


def code(block: str) -> str:
    """The one fenced code block in a text."""
    (found,) = re.findall(r"^```\w*\n(.*?)^```$", block, re.DOTALL | re.MULTILINE)
    return str(found).strip()


def rows(block: str) -> list[tuple[str, ...]]:
    """The cells of the one table in a text, its head and rule left out."""
    lines = [line for line in block.splitlines() if line.startswith("|")]
    return [tuple(cell.strip() for cell in line.strip("|").split("|")) for line in lines[2:]]


def request(command: str) -> Request:
    """What a curl command sends; options other than those known here fail, so that no part is passed over."""
    words = shlex.split(command.replace("\\\n", " "))
    assert words.pop(0) == "curl"
    url, headers, body, method = "", {}, b"", ""
    while words:
        word = words.pop(0)
        if word in ("--silent", "--show-error", "--fail"):
            continue
        if word == "--header":
            name, _, value = words.pop(0).partition(":")
            headers[name] = value.strip()
        elif word == "--data":
            body = words.pop(0).encode()
        elif word == "--request":
            method = words.pop(0)
        else:
            assert not word.startswith("-") and not url, word
            url = word
    return Request(method or ("POST" if body else "GET"), url, headers, body)


def links(text: str) -> list[str]:
    """Targets of all inline links, code left out."""
    prose = re.sub(r"`[^`\n]*`", "", re.sub(r"^```.*?^```$", "", text, flags=re.DOTALL | re.MULTILINE))
    return re.findall(r"\[[^\]]*\]\(([^)\s]+)\)", prose)


def anchors(text: str) -> set[str]:
    """The fragment of every heading, as the usual renderers make it."""
    heads = re.findall(r"^#+ (.*)$", text, re.MULTILINE)
    return {re.sub(r"[^\w\- ]", "", head.lower()).strip().replace(" ", "-") for head in heads}
