"""Kou's jump diffusion against the price printed with the model, and against its series in the number of jumps."""

from __future__ import annotations

import math
from typing import Any

import mpmath
import numpy as np
import pytest

from engine import MODELS, Payoff, Slice, Status, price_smiles
from tests.reference.mp_kou import erlang_weights, kou_otm_by_series

# S. G. Kou, Management Science 48(8), 2002, numerical example (from memory): S = 100, K = 98, T = 0.5, r = 5 %, no
# dividend; the European call is printed as 9.14732.
JUMPS = {"jump_intensity": 1.0, "up_probability": 0.4, "up_rate": 10.0, "down_rate": 5.0}
PRINTED = 9.14732


def _price(values: dict[str, float], one: Slice) -> Any:
    return price_smiles(MODELS["kou"](**values), [one])[0]


def test_printed_price() -> None:
    one = Slice(
        0.5, 100.0 * math.exp(0.025), math.exp(-0.025), np.array([98.0]), np.array([Payoff.CALL], dtype=np.uint8)
    )
    found = _price({"volatility": 0.16, **JUMPS}, one)
    assert found.statuses[0] == Status.OK
    assert abs(found.prices[0] - PRINTED) <= 5e-6


def test_erlang_weights_are_probabilities_with_the_right_mean_and_variance() -> None:
    share, up, down = mpmath.mpf("0.4"), mpmath.mpf(10), mpmath.mpf(5)
    with mpmath.workdps(40):
        mean_of_one = share / up - (1 - share) / down
        variance_of_one = 2 * share / up**2 + 2 * (1 - share) / down**2 - mean_of_one**2
        for n in (1, 2, 5, 12):
            rise, fall = erlang_weights(n, share, up, down), erlang_weights(n, 1 - share, down, up)
            places = range(1, n + 1)
            mean = sum(k * (a / up - b / down) for k, a, b in zip(places, rise, fall, strict=True))
            square = sum(k * (k + 1) * (a / up**2 + b / down**2) for k, a, b in zip(places, rise, fall, strict=True))
            assert abs(sum(rise) + sum(fall) - 1) < mpmath.mpf("1e-30")
            assert abs(mean - n * mean_of_one) < mpmath.mpf("1e-30")
            assert abs(square - mean**2 - n * variance_of_one) < mpmath.mpf("1e-30")


@pytest.mark.parametrize(
    ("volatility", "tau", "strikes"),
    [(0.16, 0.5, (60.0, 98.0, 200.0)), (0.3, 1.0 / 365.0, (90.0, 100.0, 112.0))],
)
def test_against_the_series(volatility: float, tau: float, strikes: tuple[float, ...]) -> None:
    values = {"volatility": volatility, **JUMPS}
    one = Slice(tau, 100.0, 1.0, np.array(strikes), np.full(len(strikes), Payoff.OTM, dtype=np.uint8))
    found = _price(values, one)
    with mpmath.workdps(20):
        for i, strike in enumerate(strikes):
            k = mpmath.log(mpmath.mpf(strike) / 100)
            exact = 100 * kou_otm_by_series(k, tau, call=k >= 0, most=18, **values)
            error = abs(found.prices[i] - exact)
            assert error <= found.error_bounds[i]
            assert error <= 1e-10 * exact  # the tolerance asked for by default
