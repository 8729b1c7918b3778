"""Second routes in mpmath, which share no line with the contour integration of ``mp_prices``.

- Black (1976) by the complementary error function;
- Merton (1976, J. Financ. Econ. 3) by his Poisson series of Black prices;
- Variance Gamma by its gamma mixture of Black prices (Madan, Carr and Chang 1998, European Finance Review 2, from
  memory);
- Heston's moment generating function by numerical integration of its Riccati equation.

All values are undiscounted and per unit forward; ``k = ln(K/F)``.
"""

from __future__ import annotations

from typing import Any

import mpmath
from mpmath import mpf

__all__ = ["black_otm", "heston_log_moment_by_ode", "merton_otm_by_series", "variance_gamma_otm_by_mixture"]


def _normal(x: Any) -> Any:
    return mpmath.erfc(-x / mpmath.sqrt(2)) / 2


def black_otm(k: Any, variance: Any, *, call: bool, forward: Any = 1) -> Any:
    """``E[(forward e^Y - e^k)^+]`` or the put, ``Y`` normal with the given variance and ``E[e^Y] = 1``."""
    k, variance, forward = mpf(k), mpf(variance), mpf(forward)
    strike = mpmath.exp(k)
    if variance == 0:
        return max(mpf(0), forward - strike if call else strike - forward)
    deviation = mpmath.sqrt(variance)
    d1 = mpmath.log(forward / strike) / deviation + deviation / 2
    d2 = d1 - deviation
    if call:
        return forward * _normal(d1) - strike * _normal(d2)
    return strike * _normal(-d2) - forward * _normal(-d1)


def merton_otm_by_series(
    k: Any,
    tau: Any,
    *,
    volatility: Any,
    jump_intensity: Any,
    jump_mean: Any,
    jump_stdev: Any,
    call: bool,
) -> Any:
    """Condition on the number of jumps: a Poisson mixture of Black prices at shifted forwards and variances."""
    count = mpf(jump_intensity) * mpf(tau)
    mean, variance = mpf(jump_mean), mpf(jump_stdev) ** 2
    compensator = mpmath.exp(mean + variance / 2) - 1
    total, n, quiet = mpf(0), 0, 0
    while quiet < 5:
        weight = mpmath.exp(-count) * count**n / mpmath.factorial(n)
        forward = mpmath.exp(-count * compensator + n * (mean + variance / 2))
        term = weight * black_otm(k, mpf(volatility) ** 2 * tau + n * variance, call=call, forward=forward)
        total += term
        quiet = quiet + 1 if n > count and term < total * mpmath.eps else 0
        n += 1
    return total


def variance_gamma_otm_by_mixture(k: Any, tau: Any, *, sigma: Any, theta: Any, nu: Any, call: bool) -> Any:
    """Condition on the gamma time ``g``, mean ``tau``, variance ``nu tau``; ``x = log g`` tames the density at 0."""
    tau, sigma, theta, nu = mpf(tau), mpf(sigma), mpf(theta), mpf(nu)
    shape = tau / nu
    drift = shape * mpmath.log(1 - theta * nu - sigma**2 * nu / 2)

    def integrand(x: Any) -> Any:
        g = mpmath.exp(x)
        density = mpmath.exp(shape * x - g / nu - shape * mpmath.log(nu) - mpmath.loggamma(shape))
        forward = mpmath.exp(drift + theta * g + sigma**2 * g / 2)
        return density * black_otm(k, sigma**2 * g, call=call, forward=forward)

    far = mpmath.mp.dps * mpmath.log(10)
    low = -far / min(shape, 1) - 5
    high = mpmath.log(nu * far * 4 + tau)
    points = [low + (high - low) * i / 24 for i in range(25)]
    return mpmath.quad(integrand, points)


def heston_log_moment_by_ode(
    w: Any, tau: Any, *, v0: Any, kappa: Any, theta: Any, sigma: Any, rho: Any, steps: int
) -> Any:
    """``B' = (w^2 - w)/2 - (kappa - rho sigma w) B + sigma^2 B^2 / 2``, ``A' = kappa theta B``.

    Gragg's extrapolated midpoint rule, order 24, ``steps`` equal steps.
    """
    w, tau = mpmath.mpmathify(w), mpf(tau)
    kappa, theta, sigma, rho = mpf(kappa), mpf(theta), mpf(sigma), mpf(rho)
    free, linear, square = (w * w - w) / 2, kappa - rho * sigma * w, sigma**2 / 2

    def slope(b: Any) -> tuple[Any, Any]:
        return free - linear * b + square * b * b, kappa * theta * b

    def midpoint(b: Any, a: Any, width: Any, n: int) -> tuple[Any, Any]:
        h = width / n
        db, da = slope(b)
        old, now = (b, a), (b + h * db, a + h * da)
        for _ in range(n - 1):
            db, da = slope(now[0])
            old, now = now, (old[0] + 2 * h * db, old[1] + 2 * h * da)
        db, da = slope(now[0])
        return (old[0] + now[0] + h * db) / 2, (old[1] + now[1] + h * da) / 2

    b, a, width = mpf(0), mpf(0), tau / steps
    for _ in range(steps):
        rows: list[tuple[Any, Any]] = []
        for j in range(1, 13):
            row = [midpoint(b, a, width, 2 * j)]
            for m in range(1, j):
                ratio = mpf(j) ** 2 / mpf(j - m) ** 2 - 1
                before = rows[j - 2]
                row.append(tuple(row[m - 1][i] + (row[m - 1][i] - before[m - 1][i]) / ratio for i in (0, 1)))  # type: ignore[arg-type]
            rows.append(row)  # type: ignore[arg-type]
        b, a = rows[-1][-1]
    return a + mpf(v0) * b
