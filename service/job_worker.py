"""A process that works on every kind of job: ``python -m service.job_worker``, as ``serve`` and ``worker`` start it."""

from __future__ import annotations

import argparse
import logging.config
import os
from collections.abc import Sequence

__all__ = ["main"]


def main(arguments: Sequence[str] | None = None) -> None:
    """Work until told to stop. Settings come from the environment."""
    parser = argparse.ArgumentParser(
        prog="python -m service.job_worker", description="Work on jobs until told to stop."
    )
    parser.add_argument("--supervised", action="store_true", help="end, once idle, when standard input is closed")
    supervised = parser.parse_args(arguments).supervised
    from service.calibrations.job import KIND as CALIBRATIONS
    from service.jobs.worker import run_worker
    from service.logs import log_config
    from service.settings import Settings

    settings = Settings.from_environment(os.environ)
    logging.config.dictConfig(log_config(settings.log_level))
    run_worker(settings, [CALIBRATIONS], supervised=supervised)


if __name__ == "__main__":
    main()
