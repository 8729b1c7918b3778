"""What the documents say is there: links, files, modules, commands; nothing is left to be filled in."""

from __future__ import annotations

import re
import tomllib
from importlib.util import find_spec
from pathlib import Path

import pytest

from tests.bench import registry
from tests.docs.markdown import DOCUMENTS, ROOT, anchors, code, links, marked
from tests.unit.house import tracked

CONFIGURATION = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
BY_NAME = pytest.mark.parametrize("path", DOCUMENTS, ids=[str(p.relative_to(ROOT)) for p in DOCUMENTS])


@BY_NAME
def test_links_resolve(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    for target in links(text):
        if re.match(r"\w+://", target):
            continue
        name, _, fragment = target.partition("#")
        there = (path.parent / name).resolve() if name else path
        assert there.exists(), target
        if fragment:
            assert fragment in anchors(there.read_text(encoding="utf-8")), target


@BY_NAME
def test_files_and_modules_named_exist(path: Path) -> None:
    """Every path of this tree and every dotted module of ours that stands in backticks."""
    missing = []
    for word in re.findall(r"`([^`\n]+)`", path.read_text(encoding="utf-8")):
        if re.fullmatch(r"(?:engine|service|tests|openapi|docker)/[\w./-]*", word):
            if not _in_the_tree(ROOT / word):
                missing.append(word)
        elif re.fullmatch(r"(?:engine|service|tests)(?:\.\w+)+", word) and not _dotted(word):
            missing.append(word)
    assert missing == []


def _in_the_tree(path: Path) -> bool:
    """Whether git knows the file, or a file in the folder: an empty folder is not in anybody's clone."""
    if not tracked():
        return path.exists()
    return any(path == known or path in known.parents for known in tracked())


def _dotted(word: str) -> bool:
    """Whether a dotted name is a module, or a name inside one."""
    try:
        if find_spec(word) is not None:
            return True
    except ModuleNotFoundError:
        pass
    module, _, name = word.rpartition(".")
    try:
        return find_spec(module) is not None and hasattr(__import__(module, fromlist=[name]), name)
    except ModuleNotFoundError:
        return False


@BY_NAME
def test_nothing_is_left_to_fill_in(path: Path) -> None:
    assert re.findall(r"FIGURE\([\w-]*\)|TODO|TBD", path.read_text(encoding="utf-8")) == []


@pytest.mark.parametrize("name", ["demo-command", "test-command"])
def test_the_two_commands_do_their_own_set_up(name: str) -> None:
    """One line each: make the environment, install, run what was installed, with nothing but python3 before that."""
    steps = [step.split() for step in code(marked(name)).split(" && ")]
    assert steps[0] == ["python3", "-m", "venv", ".venv"]
    assert steps[1][:2] == [".venv/bin/pip", "install"]
    assert steps[2][0] in (".venv/bin/smilewright", ".venv/bin/python")
    assert len(steps) == 3


def test_extras_named_in_commands_exist() -> None:
    extras = set(CONFIGURATION["project"]["optional-dependencies"])
    for path in DOCUMENTS:
        for names in re.findall(r'"\.\[([\w,]+)\]"', path.read_text(encoding="utf-8")):
            assert set(names.split(",")) <= extras


def test_markers_named_exist() -> None:
    declared = {line.partition(":")[0] for line in CONFIGURATION["tool"]["pytest"]["ini_options"]["markers"]}
    for path in DOCUMENTS:
        assert set(re.findall(r"pytest [^`\n]*-m (\w+)", path.read_text(encoding="utf-8"))) <= declared
    assert {"long", "load", "fault", "bench"} <= declared


def test_benchmarks_named_exist() -> None:
    for path in DOCUMENTS:
        named = re.findall(r"python -m tests\.bench ([a-z]\w*)", path.read_text(encoding="utf-8"))
        assert set(named) <= set(registry.names())


def test_every_dependency_beyond_the_given_ones_has_a_decision_note() -> None:
    """The runtime core is given; whatever stands beside it is justified in DEVELOPERS.md."""
    given = {"numpy", "scipy", "fastapi", "pydantic", "httpx", "pytest"}
    project = CONFIGURATION["project"]
    wanted = [*project["dependencies"], *(d for e in ("test", "lint") for d in project["optional-dependencies"][e])]
    names = {re.split(r"[\[>=<~ ]", line)[0] for line in wanted} - given
    notes = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8").partition("## Decision notes")[2]
    assert {name for name in names if name not in notes} - {"pytest-xdist"} == set()
