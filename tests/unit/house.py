"""The tree as the house rules see it: which files and modules there are."""

from __future__ import annotations

import subprocess
from functools import cache
from pathlib import Path

__all__ = ["PACKAGES", "ROOT", "modules", "sources", "tracked"]

ROOT = Path(__file__).resolve().parents[2]
PACKAGES = ("engine", "service")


def sources(*packages: str) -> list[Path]:
    """Every Python file of the packages, sorted."""
    return sorted(path for package in packages for path in (ROOT / package).rglob("*.py"))


def modules(*packages: str) -> list[str]:
    """Every module of the packages by its dotted name, ``__main__`` files left out: they run when imported."""
    names = []
    for path in sources(*packages):
        parts = path.relative_to(ROOT).with_suffix("").parts
        if parts[-1] != "__main__":
            names.append(".".join(parts[:-1] if parts[-1] == "__init__" else parts))
    return names


@cache
def tracked() -> tuple[Path, ...]:
    """Every file git tracks, or would on the next commit (new and not ignored); empty outside a git checkout."""
    answer = subprocess.run(
        ["git", "-c", f"safe.directory={ROOT}", "ls-files", "--cached", "--others", "--exclude-standard", "-z"],
        cwd=ROOT,
        capture_output=True,
        check=False,
    )
    if answer.returncode != 0:
        return ()
    names = {name for name in answer.stdout.decode().split("\0") if name}
    return tuple(sorted(ROOT / name for name in names if (ROOT / name).is_file()))
