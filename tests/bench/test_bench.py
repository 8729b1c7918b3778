"""The benchmark runner itself, and (behind the marker) that every benchmark runs. Times are never judged."""

from __future__ import annotations

import pytest

from tests.bench import registry
from tests.bench.__main__ import main
from tests.bench.table import Table, error, ratio, seconds
from tests.bench.timing import Stopwatch


def test_stopwatch_times_in_turn_and_warms_up() -> None:
    """Two calls are made alternately: a warm-up and a sizing call each, then one a round."""
    seen: list[str] = []
    found = Stopwatch(rounds=3, shortest=0.0).together({"a": lambda: seen.append("a"), "b": lambda: seen.append("b")})
    assert "".join(seen) == "aabb" + "ab" * 3
    assert {name: (t.rounds, t.calls) for name, t in found.items()} == {"a": (3, 1), "b": (3, 1)}
    assert all(0.0 < t.best <= t.median for t in found.values())


def test_short_work_is_repeated_within_a_round() -> None:
    assert Stopwatch(rounds=1, shortest=1e-3).one(lambda: None).calls > 1


def test_table_lines_up_and_refuses_a_short_row() -> None:
    table = Table("t", ("name", "x"), notes=["a note"])
    table.add("long name", "1")
    lines = table.text().splitlines()
    assert lines[2:5] == ["| name      |  x |", "| --------- | -: |", "| long name |  1 |"]
    assert lines[5] == "  a note"
    with pytest.raises(ValueError, match="1 cells for 2 columns"):
        table.add("short")


@pytest.mark.parametrize(
    ("shown", "text"),
    [
        (seconds(2.5), "2.5 s"),
        (seconds(2.5e-3), "2.5 ms"),
        (seconds(2.5e-6), "2.5 us"),
        (seconds(2.5e-8), "25 ns"),
        (ratio(3.0, 2.0), "1.5 x"),
        (ratio(3.0, 0.0), "-"),
        (error(0.0), "0"),
        (error(float("nan")), "-"),
        (error(1.26e-13), "1.3e-13"),
    ],
)
def test_cells(shown: str, text: str) -> None:
    assert shown == text


def test_an_unknown_name_is_a_wrong_argument(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as end:
        main(["no_such_benchmark"])
    assert end.value.code == 2
    assert "no benchmark named no_such_benchmark" in capsys.readouterr().err


@pytest.mark.bench
@pytest.mark.parametrize("name", registry.names())
def test_every_benchmark_runs(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--quick", name]) == 0
    assert "| " in capsys.readouterr().out
