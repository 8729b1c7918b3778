"""``python -m tests.bench [NAME ...] [--quick] [--list]``: print the tables. Exit codes: 0 done, 2 wrong arguments."""

from __future__ import annotations

import argparse
import os
import platform
import sys

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy  # noqa: E402  (after the thread counts are pinned)
import scipy  # noqa: E402

from tests.bench import registry  # noqa: E402
from tests.bench.timing import Stopwatch  # noqa: E402


def _machine() -> str:
    threads = os.environ["OPENBLAS_NUM_THREADS"]
    return (
        f"Python {platform.python_version()}, numpy {numpy.__version__}, scipy {scipy.__version__}, "
        f"{platform.machine()}, {os.cpu_count()} cores, {threads} thread(s) used"
    )


def _arguments(words: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog="python -m tests.bench", description="Time against floors and rivals, with accuracy."
    )
    parser.add_argument("names", nargs="*", metavar="NAME", help="which benchmarks (all if none is named)")
    parser.add_argument("--quick", action="store_true", help="small sizes, one round: only shows that each one runs")
    parser.add_argument("--list", action="store_true", help="name the benchmarks and stop")
    found = parser.parse_args(words)
    unknown = sorted(set(found.names) - set(registry.names()))
    if unknown:
        parser.error(f"no benchmark named {', '.join(unknown)}; there are: {', '.join(registry.names())}")
    return found


def main(words: list[str] | None = None) -> int:
    """Run the named benchmarks and print their tables."""
    arguments = _arguments(words)
    chosen = [registry.load(name) for name in arguments.names or registry.names()]
    if arguments.list:
        for benchmark in chosen:
            print(f"{benchmark.name:<20} {benchmark.title}")
        return 0
    print(_machine(), end="\n\n")
    watch = Stopwatch.brief() if arguments.quick else Stopwatch()
    for benchmark in chosen:
        print(f"== {benchmark.name}: {benchmark.title} ==\n")
        for table in benchmark.tables(watch):
            print(table.text(), flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
