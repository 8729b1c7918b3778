"""The sum over the nodes at every strike: window sum against its own FFT (its floor) and against the direct sum."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from scipy import fft

from engine.transform.window import grid_length, grid_of, inverse_window, sums_at
from tests.bench.table import Table, count, error, ratio, seconds
from tests.bench.timing import Stopwatch

TITLE = "the trigonometric sum at arbitrary points"
SIZES = ((256, 100), (1024, 100), (1024, 1000), (4096, 1000))  # (nodes, points)


def tables(watch: Stopwatch) -> Iterable[Table]:
    """One row a size; the error is the largest against extended precision, in units of ``sum |c_j|``."""
    table = Table(
        "Window sum of N nodes at n points, one row",
        ("N x n", "window sum", "of its FFT", "direct sum", "of window sum", "error", "error, direct"),
        notes=["error: largest over the points against an extended-precision sum, in units of sum |c_j|"],
    )
    for nodes, points in SIZES[:1] if watch.quick else SIZES:
        table.add(*_row(watch, nodes, points))
    yield table


def _row(watch: Stopwatch, nodes: int, points: int) -> tuple[str, ...]:
    rng = np.random.default_rng(20261201)
    size = np.exp(-8.0 * np.arange(nodes) / nodes)  # a decay like that of a characteristic function
    c = (size * np.exp(2j * np.pi * rng.random(nodes)))[None, :]
    c[0, 0] = c[0, 0].real
    position = rng.random(points)
    offset, length = np.zeros(points, dtype=np.int64), np.full(points, grid_length(nodes))
    half = np.where(np.arange(nodes) == 0, 0.5, 1.0) * c[0]
    angle = 2.0 * np.pi * np.arange(nodes)

    def window() -> np.ndarray:
        return sums_at(grid_of(c * inverse_window(nodes)), offset, length, position)[0]

    def direct() -> np.ndarray:
        return (np.exp(1j * position[:, None] * angle) @ half).real

    times = watch.together(
        {
            "window": window,
            "fft": lambda: fft.irfft(c, n=grid_length(nodes), axis=-1),
            "direct": direct,
        }
    )
    exact = _extended(half, position)
    scale = float(np.sum(np.abs(half)))
    worst, worst_direct = (float(np.max(np.abs(found - exact))) / scale for found in (window(), direct()))
    return (
        f"{count(nodes)} x {count(points)}",
        seconds(times["window"].best),
        ratio(times["window"].best, times["fft"].best),
        seconds(times["direct"].best),
        ratio(times["direct"].best, times["window"].best),
        error(worst),
        error(worst_direct),
    )


def _extended(half: np.ndarray, position: np.ndarray) -> np.ndarray:
    """The sum in extended precision, its angles reduced by whole turns first; one point at a time to spare memory."""
    turn = 2 * np.arccos(np.longdouble(-1))
    j = np.arange(half.shape[0], dtype=np.longdouble)
    real, imaginary = half.real.astype(np.longdouble), half.imag.astype(np.longdouble)
    out = np.empty(position.shape, dtype=np.longdouble)
    for i, x in enumerate(position.astype(np.longdouble)):
        angle = turn * np.mod(j * x, 1)
        out[i] = np.sum(real * np.cos(angle) - imaginary * np.sin(angle))
    return out
