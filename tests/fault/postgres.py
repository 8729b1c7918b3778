"""A private PostgreSQL server for the fault tests: found, or installed where that is possible, and started on a port
and in folders of its own."""

from __future__ import annotations

import os
import pwd
import shutil
import socket
import subprocess
import tempfile
import uuid
from pathlib import Path

import pytest

__all__ = ["Postgres"]

_ACCOUNT = "postgres"  # the server refuses to run as root


class Postgres:
    """One server; ``stop`` and ``start`` take it away and bring it back as it was."""

    def __init__(self) -> None:
        self._bin = _binaries()
        self._root = os.geteuid() == 0
        self.folder = Path(tempfile.mkdtemp(prefix="smilewright-pg-"))
        if self._root:
            shutil.chown(self.folder, _ACCOUNT)
        with socket.socket() as free:
            free.bind(("127.0.0.1", 0))
            self.port = free.getsockname()[1]
        self._run("initdb", "--auth=trust", "--username=jobs", "--no-sync", "-D", str(self.folder / "data"))
        self.start()

    def start(self) -> None:
        options = f"-p {self.port} -k {self.folder} -c listen_addresses=127.0.0.1"
        log = str(self.folder / "log")
        self._run("pg_ctl", "-D", str(self.folder / "data"), "-w", "-l", log, "-o", options, "start")

    def stop(self) -> None:
        self._run("pg_ctl", "-D", str(self.folder / "data"), "-w", "-m", "immediate", "stop")

    def database(self) -> str:
        """The address of a new empty database."""
        name = f"jobs_{uuid.uuid4().hex[:8]}"
        self._run("createdb", "-h", "127.0.0.1", "-p", str(self.port), "-U", "jobs", name)
        return f"postgresql://jobs@127.0.0.1:{self.port}/{name}"

    def close(self) -> None:
        self.stop()
        shutil.rmtree(self.folder, ignore_errors=True)

    def _run(self, name: str, *arguments: str) -> None:
        command = [str(self._bin / name), *arguments]
        if self._root:
            command = ["setpriv", f"--reuid={_ACCOUNT}", f"--regid={_ACCOUNT}", "--clear-groups", *command]
        done = subprocess.run(
            command, cwd=self.folder, stdin=subprocess.DEVNULL, capture_output=name != "pg_ctl", text=True, check=False
        )
        assert done.returncode == 0, f"{name}: {done.stderr}"


def _binaries() -> Path:
    """Where the server's programs are, after installing them where there are none."""
    found = _found()
    if found is None and os.geteuid() == 0 and shutil.which("apt-get"):
        environment = dict(os.environ, DEBIAN_FRONTEND="noninteractive")
        subprocess.run(["apt-get", "update", "-q"], check=True, capture_output=True)
        install = ["apt-get", "install", "-y", "-q", "--no-install-recommends", "postgresql"]
        subprocess.run(install, check=True, capture_output=True, env=environment)
        found = _found()
    if found is None:
        pytest.skip("there is no PostgreSQL here, and it cannot be installed")
    return found


def _found() -> Path | None:
    places = sorted(Path("/usr/lib/postgresql").glob("*/bin")) if Path("/usr/lib/postgresql").exists() else []
    onpath = shutil.which("initdb")
    places += [Path(onpath).resolve().parent] if onpath else []
    for place in reversed(places):
        if (place / "initdb").exists() and (place / "createdb").exists():
            try:
                if os.geteuid() == 0:
                    pwd.getpwnam(_ACCOUNT)
            except KeyError:
                return None
            return place
    return None
