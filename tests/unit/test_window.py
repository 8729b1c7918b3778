"""The window sum against the direct sum in extended precision, its phases reduced exactly in integers.

Two errors are told apart. The window's own is at most ``WINDOW_ERROR sum |c_j| w_0 / w_j``. A position is a double,
so it stands for an interval of half a rounding unit around itself; what that does to the phases, ``pi eps |x| sum j
|c_j|``, is the caller's to account for and is allowed here on top.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from engine.transform.window import WINDOW_ERROR, grid_length, grid_of, inverse_window, sums_at

EPS = float(np.finfo(np.float64).eps)
SIZES = [2, 3, 7, 8, 13, 16, 17, 61, 128, 251, 896, 1021]  # primes among them; the planner's own ladder is coarser
POSITIONS = np.concatenate(
    [
        np.random.default_rng(11).random(24),
        [0.0, 0.5, 1.0, -1.0, 0.25, 2.0 / 3.0, 1.0 - 2.0**-53, 2.0**-60, -(2.0**-60), 1e-300, -1e-300],
        [1e-3, -1e-3, 1e-7, -1e-7, -0.02, 0.02, -0.37, 12.625, -12.625, 37.3, -37.3],
    ]
)


def _coefficients(kind: str, nodes: int) -> np.ndarray:
    rng = np.random.default_rng([nodes, len(kind)])
    j = np.arange(nodes)
    phase = np.exp(2j * np.pi * rng.random(nodes))
    c = {
        "decaying": np.exp(-18.0 * j / nodes) * np.exp(1j * 0.3 * j),  # like a characteristic function
        "gaussian": np.exp(-18.0 * (j / nodes) ** 2) + 0j,
        "flat": phase,
        "last": np.where(j == nodes - 1, phase, 0.0),
        "steep": np.exp(-700.0 * j / nodes) * phase,
    }[kind]
    c[0] = c[0].real
    return np.asarray(c)


def _direct(c: np.ndarray, position: np.ndarray) -> np.ndarray:
    """``Re[c_0 / 2 + sum c_j exp(2 pi i j x)]`` in extended precision; ``j x mod 1`` is exact."""
    two_pi = 2 * np.arctan2(np.longdouble(0), np.longdouble(-1))
    half = np.where(np.arange(c.shape[0]) == 0, 0.5, 1.0).astype(np.longdouble)
    re, im = half * c.real.astype(np.longdouble), half * c.imag.astype(np.longdouble)
    out = np.empty(position.shape, dtype=np.longdouble)
    for i, x in enumerate(position):
        exact = Fraction(float(x))
        turns = [exact.numerator * j % exact.denominator for j in range(c.shape[0])]
        scale = max(exact.denominator.bit_length() - 64, 0)  # a denominator is a power of two: keep its 63 leading bits
        angle = np.array([t >> scale for t in turns], dtype=np.uint64).astype(np.longdouble)
        angle *= two_pi / np.longdouble(exact.denominator >> scale)
        out[i] = np.sum(re * np.cos(angle) - im * np.sin(angle))
    return out


def _sum(c: np.ndarray, position: np.ndarray) -> np.ndarray:
    length = np.full(position.shape, grid_length(c.shape[0]))
    grid = grid_of(c * inverse_window(c.shape[0]))
    return sums_at(grid[None, :], np.zeros(position.shape, dtype=np.int64), length, position)[0]


def _allowed(c: np.ndarray, position: np.ndarray) -> np.ndarray:
    inverse = inverse_window(c.shape[0])
    own = WINDOW_ERROR * float(np.abs(c) @ inverse) / float(inverse[0])
    return own + 0.5 * EPS * np.abs(position) * 2.0 * np.pi * float(np.abs(c) @ np.arange(c.shape[0]))


@pytest.mark.parametrize("nodes", SIZES)
@pytest.mark.parametrize("kind", ["decaying", "gaussian", "flat", "last", "steep"])
def test_error_within_the_stated_bound(kind: str, nodes: int) -> None:
    c = _coefficients(kind, nodes)
    error = np.abs(_sum(c, POSITIONS) - _direct(c, POSITIONS))
    worst = int(np.argmax(error / _allowed(c, POSITIONS)))
    assert np.all(error <= _allowed(c, POSITIONS)), (POSITIONS[worst], error[worst], _allowed(c, POSITIONS)[worst])


def test_the_stated_bound_is_not_idle() -> None:
    """Somewhere the error reaches a hundredth of it: a bound a thousand times too wide would cost accuracy unseen."""
    c = _coefficients("flat", 1021)
    assert np.max(np.abs(_sum(c, POSITIONS) - _direct(c, POSITIONS)) / _allowed(c, POSITIONS)) > 1e-2


def test_inverse_window_against_its_integral() -> None:
    """``M / (2 w_j)`` by adaptive quadrature of the same window, another rule than the module's."""
    from scipy.integrate import quad

    from engine.transform.window import BETA, WIDTH

    nodes = 64
    found = inverse_window(nodes)
    for j in (0, 1, 17, 40, 63):
        angle = np.pi * WIDTH * j / grid_length(nodes)
        value, _ = quad(
            lambda s, a=angle: np.cos(s) * np.exp(BETA * (np.cos(s) - 1.0)) * np.cos(a * np.sin(s)),
            -0.5 * np.pi,
            0.5 * np.pi,
            epsabs=0.0,
            epsrel=1e-13,
            limit=200,
        )  # t = sin s takes the square root out of the window
        assert found[j] * WIDTH * value == pytest.approx(grid_length(nodes), rel=1e-12)


def test_many_rows_are_the_rows_one_by_one() -> None:
    """Rows of different lengths end to end, points of several in any order."""
    rows = [_coefficients("flat", n) for n in (8, 61, 251)]
    grids = [grid_of(c * inverse_window(c.shape[0])) for c in rows]
    starts = np.concatenate([[0], np.cumsum([g.shape[0] for g in grids])[:-1]])
    lengths = np.array([grid_length(c.shape[0]) for c in rows])
    rng = np.random.default_rng(3)
    row, position = rng.integers(0, 3, 5000), rng.normal(size=5000)
    joined = np.concatenate(grids)
    found = sums_at(np.stack([joined, 2.0 * joined]), starts[row], lengths[row], position)
    for i, c in enumerate(rows):
        alone = _sum(c, position[row == i])
        assert np.array_equal(found[0, row == i], alone)
        assert np.array_equal(found[1, row == i], 2.0 * alone)
