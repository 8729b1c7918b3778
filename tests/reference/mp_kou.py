"""Kou's model by conditioning on the number of jumps, in mpmath: a second route that knows no characteristic function.

The sum of ``n`` double-exponential jumps has the law of a sum of ``k`` upward or of ``k`` downward exponentials, with
probabilities in closed form (Kou 2002, appendix B, from memory; that they add up to one and give the first two moments
is checked in the test). Over the Poisson number of jumps the jumps' law is an atom at 0 and a density of Erlang terms
on either side; given its value the price is lognormal, so that one real integral of Black prices is left.
"""

from __future__ import annotations

from typing import Any

import mpmath
from mpmath import mpf

from tests.reference.mp_series import black_otm

__all__ = ["erlang_weights", "kou_otm_by_series"]


def erlang_weights(n: int, share: Any, own: Any, other: Any) -> list[Any]:
    """Probability that ``n`` jumps add up to ``k`` of the side's own exponentials, ``k = 1 .. n``."""
    share, back = mpf(share), 1 - mpf(share)
    toward, away = own / (own + other), other / (own + other)
    out = [
        mpmath.fsum(
            mpmath.binomial(n - k - 1, i - k)
            * mpmath.binomial(n, i)
            * toward ** (i - k)
            * away ** (n - i)
            * share**i
            * back ** (n - i)
            for i in range(k, n)
        )
        for k in range(1, n)
    ]
    return [*out, share**n]


def _density(count: Any, most: int, share: Any, own: Any, other: Any) -> list[Any]:
    """Weights of the Erlang densities of one side, over the Poisson number of jumps."""
    total = [mpf(0)] * most
    for n in range(1, most + 1):
        poisson = mpmath.exp(-count) * count**n / mpmath.factorial(n)
        for k, weight in enumerate(erlang_weights(n, share, own, other)):
            total[k] += poisson * weight
    return total


def kou_otm_by_series(
    k: Any,
    tau: Any,
    *,
    volatility: Any,
    jump_intensity: Any,
    up_probability: Any,
    up_rate: Any,
    down_rate: Any,
    call: bool,
    most: int,
) -> Any:
    """Undiscounted value per unit forward at ``k = ln(K/F)``; jumps past ``most`` are left out."""
    k, tau, up, down = mpf(k), mpf(tau), mpf(up_rate), mpf(down_rate)
    share, count = mpf(up_probability), mpf(jump_intensity) * tau
    variance = mpf(volatility) ** 2 * tau
    drift = -count * (share / (up - 1) - (1 - share) / (down + 1))
    width = mpmath.sqrt(variance)

    def black(y: Any) -> Any:
        return black_otm(k, variance, call=call, forward=mpmath.exp(drift + y))

    value = mpmath.exp(-count) * black(mpf(0))
    for sign, rate, other, own_share in ((1, up, down, share), (-1, down, up, 1 - share)):
        weights = _density(count, most, own_share, rate, other)

        def integrand(y: Any, sign: int = sign, rate: Any = rate, weights: list[Any] = weights) -> Any:
            x = rate * y
            erlang = mpmath.fsum(w * x**j / mpmath.factorial(j) for j, w in enumerate(weights))
            return rate * mpmath.exp(-x) * erlang * black(sign * y)

        end = mpmath.mp.dps * 6 / (rate - 1 if call and sign > 0 else rate)
        turn = sign * (k - drift)  # where the payoff sets in
        near = [turn + j * width for j in (-6, -3, -1, 0, 1, 3, 6)]
        points = sorted({mpf(0), end / 40, end / 10, end / 3, end, *(y for y in near if 0 < y < end)})
        value += mpmath.quad(integrand, points)
    return value
