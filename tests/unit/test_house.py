"""The rules of the house that a linter cannot see: what an import may do, sizes, names, layout, words."""

from __future__ import annotations

import ast
import json
import os
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.unit.house import PACKAGES, ROOT, modules, sources, tracked

LAYOUT = {"README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE", "service", "engine", "tests", "openapi", "docker"}
DRAWERS = {"utils", "util", "helpers", "helper", "common", "misc", "manager", "managers", "core", "tools", "stuff"}
MODULE_STOP = 400
FUNCTION_STOP = 50
SERVICE_LIBRARIES = ("fastapi", "starlette", "pydantic", "uvicorn", "httpx", "orjson", "prometheus_client", "service")

HOSTS = (
    ("py", "pi.org"),
    ("python", "hosted.org"),
    ("npm", "js."),
    ("ghcr", ".io"),
    ("quay", ".io"),
    ("debian", ".org"),
    ("golang", ".org"),
    ("ana", "conda.org"),
    ("hugging", "face.co"),
)


def _pattern(*words: tuple[str, ...]) -> re.Pattern[str]:
    """Any of the words, each given in pieces so that this file does not hold the words it looks for."""
    return re.compile("|".join(re.escape("".join(word)) for word in words), re.IGNORECASE)


FORBIDDEN = {
    "a registry's host": _pattern(*HOSTS),
    "an absolute path of one machine": re.compile(r"(?<![\w.}])/(?:work|root|tmp|home|Users)/"),
    "the number of an issue": re.compile(r"\bissues? #?\d", re.IGNORECASE),
}
BACKGROUND = _pattern(("seed", " document"), ("conference", " talk"))


def _run(*arguments: str) -> str:
    environment = dict(os.environ, PYTHONDONTWRITEBYTECODE="1", OMP_NUM_THREADS="1", OPENBLAS_NUM_THREADS="1")
    done = subprocess.run(
        [sys.executable, *arguments],
        cwd=ROOT,
        env=environment,
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def _trees(*packages: str) -> Iterator[tuple[Path, ast.Module]]:
    for path in sources(*packages):
        yield path.relative_to(ROOT), ast.parse(path.read_text(encoding="utf-8"))


def _imported(tree: ast.Module) -> Iterator[str]:
    """Dotted names of the modules a file imports from."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
            yield node.module


@pytest.mark.skipif(not hasattr(os, "fork"), reason="the watcher forks one child a module")
def test_import_does_nothing_but_import() -> None:
    """No thread, socket, process, file or environment read while a module is imported in a fresh process."""
    names = modules(*PACKAGES)
    assert len(names) > 20
    seen = json.loads(_run("-W", "ignore", "-m", "tests.unit.import_watch", *names))
    assert set(seen) == set(names)
    assert {name: faults for name, faults in seen.items() if faults} == {}


def test_the_import_watcher_sees_each_fault(tmp_path: Path) -> None:
    """The watcher is itself checked: a module of every bad habit is caught at each."""
    room = tmp_path / "service"
    room.mkdir()
    (room / "__init__.py").write_text("")
    (room / "bad.py").write_text(
        "import os, socket, threading, pathlib\n"
        "os.environ.get('HOME')\n"
        "os.getenv('PATH')\n"
        "socket.socket().close()\n"
        "pathlib.Path(__file__).read_text()\n"
        "threading.Thread(target=print).start()\n"
        f"open({str(tmp_path / 'written')!r}, 'w').close()\n"
    )
    code = (
        f"import sys; sys.path.insert(0, {str(tmp_path)!r})\n"
        "from tests.unit.import_watch import main\n"
        "main(['service.bad'])\n"
    )
    (faults,) = json.loads(_run("-W", "ignore", "-c", code).splitlines()[-1]).values()
    for word in ("HOME", "PATH", "socket", "reads a file", "starts a thread", "writes a file"):
        assert any(word in fault for fault in faults), (word, faults)


def test_engine_works_without_the_service_libraries() -> None:
    """The engine imports where no web library is installed: an importer refuses them all."""
    code = (
        "import sys, importlib\n"
        f"blocked = {SERVICE_LIBRARIES!r}\n"
        "class Refuse:\n"
        "    def find_spec(self, name, path=None, target=None):\n"
        "        if name.split('.')[0] in blocked:\n"
        "            raise ModuleNotFoundError(f'{name} is not installed here', name=name)\n"
        "sys.meta_path.insert(0, Refuse())\n"
        f"for name in {modules('engine')!r}:\n"
        "    importlib.import_module(name)\n"
        "print(sorted(set(blocked) & set(sys.modules)))\n"
    )
    assert _run("-c", code).strip() == "[]"


def test_service_reaches_the_engine_by_its_face_only() -> None:
    faults = [
        f"{path}: {name}" for path, tree in _trees("service") for name in _imported(tree) if name.startswith("engine.")
    ]
    assert faults == []


def test_numpy_starts_at_the_mapping_and_pydantic_stays_in_the_service() -> None:
    faults = [
        f"{path}: {name}"
        for path, tree in _trees(*PACKAGES)
        for name in _imported(tree)
        if (name.split(".")[0] in ("numpy", "scipy") and path.name in ("routes.py", "schemas.py"))
        or (name.split(".")[0] == "pydantic" and path.parts[0] == "engine")
    ]
    assert faults == []


def test_resources_do_not_import_each_other() -> None:
    """A resource is a folder of the service with routes of its own."""
    resources = {path.parent.name for path in sources("service") if path.name == "routes.py"}
    faults = [
        f"{path}: {name}"
        for path, tree in _trees("service")
        for name in _imported(tree)
        if len(path.parts) > 2
        and path.parts[1] in resources
        and name.startswith("service.")
        and name.split(".")[1] in resources - {path.parts[1]}
    ]
    assert faults == []


def test_no_module_passes_the_size_stop() -> None:
    sizes = {str(p.relative_to(ROOT)): len(p.read_text(encoding="utf-8").splitlines()) for p in sources(*PACKAGES)}
    assert {name: size for name, size in sizes.items() if size > MODULE_STOP} == {}


def test_no_function_passes_the_size_stop() -> None:
    """Lines of a function from ``def`` to its end, the docstring not counted: documentation is never too long."""
    faults = {}
    for path, tree in _trees(*PACKAGES):
        for node in ast.walk(tree):
            if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
                size = (node.end_lineno or node.lineno) - node.lineno + 1
                first = node.body[0]
                if ast.get_docstring(node, clean=False) is not None:
                    size -= (first.end_lineno or first.lineno) - first.lineno + 1
                if size > FUNCTION_STOP:
                    faults[f"{path}:{node.name}"] = size
    assert faults == {}


def test_every_module_names_its_face() -> None:
    """``__all__`` in each module that defines something public, and every name in it exists."""
    faults = []
    for path, tree in _trees(*PACKAGES):
        defined = {n.name for n in tree.body if isinstance(n, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef)}
        bound = {t.id for n in tree.body if isinstance(n, ast.Assign) for t in n.targets if isinstance(t, ast.Name)}
        if any(not name.startswith("_") for name in defined) and "__all__" not in bound:
            faults.append(str(path))
    assert faults == []


def test_no_drawers() -> None:
    """A file or folder has a noun of its own; `part2` and its like are no nouns."""
    faults = [
        str(path.relative_to(ROOT))
        for path in sources(*PACKAGES, "tests")
        for part in path.relative_to(ROOT).with_suffix("").parts
        if part.lower() in DRAWERS or re.fullmatch(r"(.*_)?(part|v|new|old)_?\d*", part.lower())
    ]
    assert faults == []


def test_top_level_layout_is_exact() -> None:
    if not tracked():
        pytest.skip("not a git checkout: which files belong to the tree is not known")
    top = {path.relative_to(ROOT).parts[0] for path in tracked()}
    assert {name for name in top if not name.startswith(".")} == LAYOUT


def _texts() -> Iterator[tuple[str, int, str]]:
    for path in tracked():
        try:
            text = path.read_text(encoding="utf-8")
        except UnicodeDecodeError:
            continue
        for number, line in enumerate(text.splitlines(), 1):
            yield str(path.relative_to(ROOT)), number, line


@pytest.mark.parametrize("what", FORBIDDEN)
def test_no_forbidden_words(what: str) -> None:
    if not tracked():
        pytest.skip("not a git checkout: which files belong to the tree is not known")
    faults = [
        f"{name}:{number}: {line.strip():.100}" for name, number, line in _texts() if FORBIDDEN[what].search(line)
    ]
    assert faults == []


def test_background_is_named_in_one_place_only() -> None:
    faults = [
        f"{name}:{number}" for name, number, line in _texts() if BACKGROUND.search(line) and name != "DEVELOPERS.md"
    ]
    assert faults == []


@pytest.mark.parametrize(
    ("what", "pieces"),
    [
        ("a registry's host", ("see files.python", "hosted.org")),
        ("an absolute path of one machine", ("open('/ro", "ot/x')")),
        ("the number of an issue", ("see Iss", "ue #12")),
    ],
)
def test_the_word_search_finds_its_words(what: str, pieces: tuple[str, ...]) -> None:
    assert FORBIDDEN[what].search("".join(pieces))
