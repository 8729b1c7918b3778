"""The command ``smilewright`` as a process of its own: what it prints, where, and with which exit code."""

from __future__ import annotations

import os
import re
import shutil
import signal
import socket
import subprocess
import sys
from pathlib import Path

import httpx
import pytest

ROOT = Path(__file__).parents[2]
COMMAND = [sys.executable, "-m", "service.cli"]


def _environment(**added: str) -> dict[str, str]:
    clean = {name: value for name, value in os.environ.items() if not name.startswith("SMILEWRIGHT_")}
    return {**clean, "PYTHONDONTWRITEBYTECODE": "1", **added}


def _run(*arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*COMMAND, *arguments],
        cwd=ROOT,
        env=_environment(**environment),
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
    )


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((), "a command is needed"),
        (("price",), "invalid choice: 'price'"),
        (("serve", "--port", "http"), "--port"),
        (("serve", "--port", "70000"), "SMILEWRIGHT_PORT"),
        (("serve", "--workers", "0"), "SMILEWRIGHT_WORKERS"),
        (("serve", "--host", "0.0.0.0"), "only loopback"),
        (("demo", "--fast"), "--fast"),
    ],
)
def test_wrong_arguments_are_one_sentence_and_exit_code_2(arguments: tuple[str, ...], words: str) -> None:
    done = _run(*arguments)
    assert (done.returncode, done.stdout) == (2, "")
    assert words in done.stderr and len(done.stderr.splitlines()) == 1
    assert done.stderr.startswith("smilewright")


@pytest.mark.parametrize("arguments", [(), ("serve",), ("demo",), ("check",)])
def test_help(arguments: tuple[str, ...]) -> None:
    done = _run(*arguments, "--help")
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.startswith("usage: smilewright")


def test_a_port_in_use_is_one_sentence_and_exit_code_1() -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        done = _run("serve", "--port", str(port))
    assert (done.returncode, done.stdout) == (1, "")
    assert re.fullmatch(rf"smilewright serve: cannot listen on 127\.0\.0\.1:{port}: .*\.\n", done.stderr)


@pytest.mark.parametrize("workers", ["1", "2"])
@pytest.mark.parametrize("how", [signal.SIGTERM, signal.SIGINT])
def test_serve_says_where_it_listens_and_stops_when_told(how: signal.Signals, workers: str, tmp_path: Path) -> None:
    process = subprocess.Popen(
        [*COMMAND, "serve", "--port", "0", "--workers", workers],
        cwd=ROOT,
        env=_environment(SMILEWRIGHT_DATA_DIR=str(tmp_path), SMILEWRIGHT_JOB_WORKERS="1"),
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    )
    try:
        assert process.stdout is not None
        said = process.stdout.readline()
        found = re.search(r"listens on (http://127\.0\.0\.1:\d+) ", said)
        assert found, said
        assert "No keys are configured" in process.stdout.readline()
        transport = httpx.HTTPTransport(retries=12)  # the address is said before the processes have started
        with httpx.Client(base_url=found[1], transport=transport, timeout=60.0) as client:
            assert client.get("/healthz").json()["status"] == "alive"
        process.send_signal(how)
        assert process.wait(timeout=60) == 0
    finally:
        process.kill()
        process.communicate()


def test_demo_shows_the_whole_job(tmp_path: Path) -> None:
    done = _run("demo")
    assert (done.returncode, done.stderr) == (0, "")
    text = done.stdout
    for words in ("/v1/chains", "/v1/smiles", "/v1/implied-vols", "Quillmark", "forward", "error bound", "not quotes"):
        assert words in text
    assert "/v1/greeks" in text and re.search(r"^rho +price per 1.00 of the continuous rate$", text, re.MULTILINE)
    assert "/v1/calibrations" in text and "] 9/9 surfaces" in text
    report = Path(re.findall(r"report was saved: (.+)$", text, re.MULTILINE)[0])
    assert report.read_text(encoding="utf-8").startswith("<!DOCTYPE html>")
    shutil.rmtree(report.parent)
    for flag in ("crossed", "no_bid", "parity_outlier", "wide"):
        assert re.search(rf"^{flag} +[1-9]", text, re.MULTILINE), flag
    assert len(re.findall(r"^20\d\d-\d\d-\d\d +40/40 ", text, re.MULTILINE)) == 8
    assert max(len(line) for line in text.splitlines()) <= 120


def test_check_reports_a_sound_installation() -> None:
    done = _run("check")
    assert (done.returncode, done.stderr) == (0, "")
    for words in ("numpy", "cores", "SMILEWRIGHT_MAX_BODY_BYTES", "Lewis", "yes, every one", "OMP_NUM_THREADS"):
        assert words in done.stdout


def test_check_fails_on_settings_that_cannot_be_used() -> None:
    done = _run("check", SMILEWRIGHT_COMPUTE_THREADS="many")
    assert done.returncode == 1 and "SMILEWRIGHT_COMPUTE_THREADS" in done.stderr
    assert len(done.stderr.splitlines()) == 1


def test_version() -> None:
    done = _run("--version")
    assert done.returncode == 0 and re.fullmatch(r"smilewright \S+\n", done.stdout)
