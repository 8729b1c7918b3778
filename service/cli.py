"""The command ``smilewright``: serve, worker, demo, check.

Exit codes: 0 done, 1 the work failed, 2 wrong arguments. Errors go to standard error, one sentence each. Threads of
linear-algebra libraries are pinned to one each before numpy is loaded, so the service is imported inside functions.
"""

from __future__ import annotations

import argparse
import os
import signal
import sys
import time
from collections.abc import Sequence
from typing import Final, NoReturn

__all__ = ["main"]

_THREAD_COUNTS: Final = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
_DONE, _FAILED, _WRONG_ARGUMENTS = 0, 1, 2


class _Parser(argparse.ArgumentParser):
    """One sentence for a wrong argument instead of the whole usage."""

    def error(self, message: str) -> NoReturn:
        self.exit(_WRONG_ARGUMENTS, f"{self.prog}: {message} (see {self.prog} --help)\n")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code."""
    for name in _THREAD_COUNTS:
        os.environ.setdefault(name, "1")
    parser = _parser()
    try:
        chosen = parser.parse_args(arguments)
    except SystemExit as stopped:  # --help, --version, wrong arguments
        return int(stopped.code or 0)
    try:
        return int(chosen.run(chosen))
    except KeyboardInterrupt:
        return _DONE


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="smilewright",
        description="Option chains in, whole implied-volatility smiles out, with an error bound beside every price.",
        epilog="Exit codes: 0 done, 1 the work failed, 2 wrong arguments. Every setting of the service is an "
        "environment variable SMILEWRIGHT_*; smilewright check lists them.",
    )
    parser.add_argument("--version", action="store_true", help="print the version and exit")
    parser.set_defaults(run=_without_command)
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", parser_class=_Parser)
    serve = commands.add_parser(
        "serve",
        help="run the service",
        description="Run the service until it is interrupted; nothing else needs to be installed or started.",
    )
    serve.add_argument("--host", help="address to listen on, loopback only (default 127.0.0.1)")
    serve.add_argument("--port", type=int, help="port to listen on, 0 for a free one (default 8000)")
    serve.add_argument("--workers", type=int, help="processes that serve (default 1)")
    serve.add_argument("--job-workers", type=int, help="processes that work on jobs (default one per core)")
    serve.set_defaults(run=_serve)
    worker = commands.add_parser(
        "worker",
        help="work on jobs beside a shared store",
        description="Run processes that work on jobs until interrupted. They share the store (SMILEWRIGHT_JOB_STORE) "
        "and the data folder (SMILEWRIGHT_DATA_DIR) with the service.",
    )
    worker.add_argument("--job-workers", type=int, help="processes that work on jobs (default one per core)")
    worker.set_defaults(run=_worker)
    demo = commands.add_parser(
        "demo",
        help="see the whole job over real HTTP",
        description="Start a server on a free loopback port, send the bundled chain of an invented index through "
        "the whole job over HTTP, print the tables and exit.",
    )
    demo.set_defaults(run=_demo)
    check = commands.add_parser(
        "check",
        help="print what this installation can do",
        description="Versions, cores, threads, settings, and a short self-test of the engine against published prices.",
    )
    check.set_defaults(run=_check)
    return parser


def _without_command(chosen: argparse.Namespace) -> int:
    from service import version

    if chosen.version:
        print(f"smilewright {version()}")
        return _DONE
    return _say(
        "smilewright: a command is needed: serve, worker, demo or check (see smilewright --help)", _WRONG_ARGUMENTS
    )


def _serve(chosen: argparse.Namespace) -> int:
    from service.server import ListenError, is_loopback, listen, serve
    from service.settings import PREFIX, Settings, SettingsError

    try:
        settings = Settings.from_environment(_environment(chosen, PREFIX, "host", "port", "workers", "job_workers"))
    except SettingsError as error:
        return _say(f"smilewright serve: {error}", _WRONG_ARGUMENTS)
    if not is_loopback(settings.host):
        return _say(
            f"smilewright serve: no keys are configured, so only loopback can be listened on, not {settings.host}.",
            _WRONG_ARGUMENTS,
        )
    try:
        bound = listen(settings.host, settings.port)
    except ListenError as error:
        return _say(f"smilewright serve: {error}.", _FAILED)
    port = bound.getsockname()[1]
    host = f"[{settings.host}]" if ":" in settings.host else settings.host
    print(
        f"Smilewright listens on http://{host}:{port} (requests to try: http://{host}:{port}/docs).\n"
        "No keys are configured: it can be reached from this machine only. Ctrl-C stops it.",
        flush=True,
    )
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(_DONE))  # raised again by the server once it has stopped
    serve(settings, bound)
    return _DONE


def _environment(chosen: argparse.Namespace, prefix: str, *names: str) -> dict[str, str]:
    """The environment with the options that were given in the place of its entries."""
    given = {name: getattr(chosen, name) for name in names}
    return {**os.environ, **{prefix + name.upper(): str(value) for name, value in given.items() if value is not None}}


def _worker(chosen: argparse.Namespace) -> int:
    from service.jobs.database import where
    from service.jobs.pool import running_workers
    from service.settings import PREFIX, Settings, SettingsError

    try:
        settings = Settings.from_environment(_environment(chosen, PREFIX, "job_workers"))
    except SettingsError as error:
        return _say(f"smilewright worker: {error}", _WRONG_ARGUMENTS)
    count = max(1, settings.job_workers)
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(_DONE))
    with running_workers(settings, count):
        print(f"{count} worker{'s' * (count > 1)} for the jobs of {where(settings)}. Ctrl-C to stop.", flush=True)
        while True:
            time.sleep(3_600.0)


def _demo(_chosen: argparse.Namespace) -> int:
    from service.demo.run import DemoError, run_demo

    try:
        run_demo()
    except DemoError as error:
        return _say(f"smilewright demo: {error}", _FAILED)
    return _DONE


def _check(_chosen: argparse.Namespace) -> int:
    from service.installation import report_installation
    from service.settings import Settings, SettingsError

    try:
        settings = Settings.from_environment(os.environ)
    except SettingsError as error:
        return _say(f"smilewright check: {error}", _FAILED)
    sound = report_installation(settings)
    return _DONE if sound else _say("smilewright check: the self-test misses published prices.", _FAILED)


def _say(sentence: str, code: int) -> int:
    print(sentence, file=sys.stderr)
    return code


if __name__ == "__main__":
    sys.exit(main())
