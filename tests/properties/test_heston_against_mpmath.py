"""Heston over its whole box against multiple-precision integration written apart from the engine.

Sets run over ``tests.properties.parameter_sets``: Feller ratio 1e-3 to 1e3, |rho| up to 1 - 1e-12, v0 = 0, kappa = 0,
sigma down to 0, expiries from a day to twenty years, strikes within six standard deviations. Two demands on every
price: the stated bound covers the error, whatever the tolerance asked for; and at the default tolerance the error is
at most 1e-9 of the value wherever the out-of-the-money value is above 1e-200 of the forward.

More sets, in as many processes as wanted, with the result printed:

    python -m tests.properties.test_heston_against_mpmath SETS [SEED [WORKERS]]
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context

import numpy as np
import pytest
from hypothesis import assume, given, settings

from tests.properties.parameter_sets import DIMENSIONS, expiry, pair, unit_cube
from tests.properties.verdict import Verdict, judge

QUICK_SETS = 200
LONG_SETS = 5000
DEFAULT_TOLERANCE = 1e-10
COORDINATES = DIMENSIONS["heston"] + 5


def _judge_one(u: Sequence[float]) -> Verdict:
    """One set: the default tolerance with the relative demand, then a drawn one for the bound alone."""
    model, twin = pair("heston", u[:-5])
    tau, inner, near = expiry(u[-5]), 6.0 * u[-4], u[-3]
    if not float(model.mean_variance(tau)) > 0.0:
        return Verdict()  # no randomness at all: nothing to transform
    out = judge(model, twin, tau, [-6.0, -inner, -near, 0.0, near, inner, 6.0], tolerance=1e-10, relative=1e-9)
    middle = 12.0 * u[-2] - 6.0
    out.add(judge(model, twin, tau, [-6.0, middle, 6.0], tolerance=10.0 ** (-6.0 - 6.0 * u[-1])))
    out.smiles = 1
    return out


def _judge_block(seed: Sequence[int], sets: int) -> Verdict:
    out = Verdict()
    for u in np.random.default_rng(seed).random((sets, COORDINATES)):
        out.add(_judge_one([float(x) for x in u]))
    return out


def run(sets: int, *, seed: int = 0, workers: int = 1) -> Verdict:
    """Judge ``sets`` random sets, reproducibly for a seed whatever the number of processes."""
    block = 50
    sizes = [min(block, sets - start) for start in range(0, sets, block)]
    seeds = [[seed, i] for i in range(len(sizes))]
    out = Verdict()
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
        for part in pool.map(_judge_block, seeds, sizes):
            out.add(part)
    return out


def test_quick_sets() -> None:
    tally = Verdict()

    @settings(max_examples=QUICK_SETS, derandomize=True, database=None)
    @given(unit_cube(COORDINATES))
    def over_the_box(u: list[float]) -> None:
        found = _judge_one(u)
        assume(found.smiles)
        tally.add(found)
        assert not found.faults, "\n".join(found.faults)

    over_the_box()
    print(f"Heston against the reference: {tally}")
    assert tally.smiles >= QUICK_SETS
    assert tally.judged > 0.8 * tally.prices


@pytest.mark.long
def test_long_run() -> None:
    tally = run(LONG_SETS, seed=20, workers=2)
    print(f"Heston against the reference: {tally}")
    assert tally.smiles > 0.9 * LONG_SETS
    assert not tally.faults, "\n".join(tally.faults[:20])


if __name__ == "__main__":
    numbers = [int(word) for word in sys.argv[1:]] + [LONG_SETS, 0, 2][len(sys.argv) - 1 :]
    verdict = run(numbers[0], seed=numbers[1], workers=numbers[2])
    print(verdict, *verdict.faults, sep="\n")
    sys.exit(1 if verdict.faults else 0)
