"""Where a fit begins: parameters read off the surface itself.

Every slice is reduced to three numbers by a weighted quadratic in ``h = k / s``, ``s`` its at-the-money total
deviation: level ``s^2``, slope ``b`` and bend ``c`` of ``vol / vol_atm = 1 + b h + c h^2``. To leading order in
skewness and kurtosis of ``X`` (Backus, Foresi and Wu 2004; Bergomi and Guyon 2012, from memory)

    b = skewness / 6,        c = excess kurtosis / 24 at zero skewness

Heston, with the expected variance ``xi(t) = theta + (v0 - theta) exp(-kappa t)`` and ``a(t) = (1 - exp(-kappa t)) /
kappa``:

    s^2 = int xi                                          -> v0, theta: linear least squares for each kappa of a grid
    b s^3 = (rho sigma / 2) int xi(t) a(tau - t) dt       -> m = rho sigma
    c s^4 = (sigma^2 - 5 m^2 / 2) / 8 int xi a^2          -> sigma

with kappa the one whose levels and slopes fit best together; 5/2 is the short-time limit (Forde, Jacquier and Lee
2012, from memory). Models with jumps begin from that with jumps of a few shapes and the variance they bring taken off.
Variance Gamma: skewness and kurtosis of its increments, ``3 theta nu / (sigma sqrt(tau))`` and ``3 nu / tau``. Random
starts are spread around the automatic one by a factor of up to four.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats
from engine.calibration.weights import Quotes

__all__ = ["Shape", "automatic_starts", "random_start", "shape_of"]

_KAPPAS = np.array([0.25, 0.5, 0.8, 1.2, 1.8, 2.5, 3.5, 5.0, 8.0, 14.0])
_USUAL_KAPPA = 1.5  # one expiry says nothing about the speed
_LEAST_VARIANCE = 1e-4
_JUMPS = ((0.3, -0.12, 0.12), (1.5, -0.04, 0.06), (0.1, -0.3, 0.15), (0.5, 0.08, 0.08))
_ABSCISSAE, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(12)


@dataclass(frozen=True, slots=True)
class Shape:
    """Per slice (S,): ``tau``, at-the-money total variance, and slope and bend in ``h``; NaN where unknown."""

    tau: Floats
    level: Floats
    slope: Floats
    bend: Floats


def shape_of(quotes: Quotes) -> Shape:
    """The three numbers of every slice; slices of fewer than three strikes give a level (and a slope) only."""
    rows = []
    starts = [*quotes.batch.starts.tolist(), quotes.k.shape[0]]
    for a, b in zip(starts[:-1], starts[1:], strict=True):
        k, s = quotes.k[a:b], quotes.vols[a:b] * quotes.root_tau[a:b]
        rows.append(_three_numbers(k, s))
    level, slope, bend = np.array(rows).T
    return Shape(quotes.batch.expiry, level, slope, bend)


def _three_numbers(k: Floats, s: Floats) -> tuple[float, float, float]:
    distinct = np.unique(k).shape[0]
    middle = float(s[np.argmin(np.abs(k))])
    for _ in range(2):
        h = k / middle
        near = np.exp(-0.5 * (h / 1.2) ** 2) + 1e-3
        degree = min(distinct - 1, 2)
        basis = np.stack([h**i for i in range(degree + 1)], axis=1)
        found = np.linalg.lstsq(basis * near[:, None], s * near, rcond=None)[0]
        middle = float(np.clip(found[0], 0.5 * s.min(), 2.0 * s.max()))
    slope = float(found[1]) / middle if degree >= 1 else np.nan
    bend = float(found[2]) / middle if degree >= 2 else np.nan
    return middle * middle, slope, bend


def automatic_starts(name: str, shape: Shape) -> list[dict[str, float]]:
    """Starts for the model ``name``, the likeliest first."""
    if name == "black":
        return [{"volatility": float(np.sqrt(np.mean(shape.level / shape.tau)))}]
    if name == "variance_gamma":
        return [_variance_gamma(shape)]
    if name == "merton":
        variance = float(np.mean(shape.level / shape.tau))
        return [{"volatility": float(np.sqrt(_less_jumps(variance, *jump))), **_jumps(*jump)} for jump in _JUMPS]
    heston = _heston(shape)
    if name == "bates":
        out = []
        for jump in _JUMPS:
            less = {key: _less_jumps(heston[key], *jump) for key in ("v0", "theta")}
            out.append({**heston, **less, **_jumps(*jump)})
        return out
    if name == "double_heston":
        fast = {**heston, "v0": 0.6 * heston["v0"], "theta": 0.4 * heston["theta"], "kappa": 2.5 * heston["kappa"]}
        slow = {**heston, "v0": 0.4 * heston["v0"], "theta": 0.6 * heston["theta"], "kappa": 0.4 * heston["kappa"]}
        return [{f"factors.{i}.{key}": v for i, one in enumerate((fast, slow)) for key, v in one.items()}]
    return [heston]


def random_start(start: dict[str, float], rng: np.random.Generator) -> dict[str, float]:
    """Another start around ``start``: positive parameters up to four times away, the rest up to 0.4."""
    out = {}
    for name, value in start.items():
        u = float(rng.uniform(-1.0, 1.0))
        signed = name.split(".")[-1] in ("rho", "jump_mean") or value <= 0.0
        out[name] = value + 0.4 * u * (1.0 if name.endswith("rho") else 0.5) if signed else value * 4.0**u
    return out


def _jumps(intensity: float, mean: float, stdev: float) -> dict[str, float]:
    return {"jump_intensity": intensity, "jump_mean": mean, "jump_stdev": stdev}


def _less_jumps(variance: float, intensity: float, mean: float, stdev: float) -> float:
    return max(variance - intensity * (mean * mean + stdev * stdev), 0.3 * variance)


def _variance_gamma(shape: Shape) -> dict[str, float]:
    sigma = float(np.sqrt(np.mean(shape.level / shape.tau)))
    bends = np.clip(8.0 * shape.bend * shape.tau, 0.02, 3.0)
    nu = float(np.nanmean(bends)) if np.isfinite(bends).any() else 0.2
    drifts = 2.0 * shape.slope * sigma * np.sqrt(shape.tau) / nu
    theta = float(np.nanmean(drifts)) if np.isfinite(drifts).any() else 0.0
    theta = float(np.clip(theta, -2.0 * sigma / np.sqrt(nu), 0.3 / nu))
    return {"sigma": sigma, "theta": theta, "nu": nu}


def _heston(shape: Shape) -> dict[str, float]:
    several = shape.tau.shape[0] > 1
    fits = [_at_speed(shape, kappa) for kappa in (_KAPPAS if several else [_USUAL_KAPPA])]
    best = min(range(len(fits)), key=lambda i: fits[i].misfit)
    return fits[best].parameters


@dataclass(frozen=True, slots=True)
class _Fit:
    misfit: float
    parameters: dict[str, float]


def _at_speed(shape: Shape, kappa: float) -> _Fit:
    """The best start with this mean reversion, and how well levels and slopes fit."""
    tau = shape.tau
    share = -np.expm1(-kappa * tau) / (kappa * tau)
    v0, theta = _two_variances(np.stack([share, 1.0 - share], axis=1), shape.level / tau)
    t = 0.5 * tau[:, None] * (1.0 + _ABSCISSAE)
    step = 0.5 * tau[:, None] * _NODE_WEIGHTS
    variance = theta + (v0 - theta) * np.exp(-kappa * t)
    lag = -np.expm1(-kappa * (tau[:, None] - t)) / kappa
    once, twice = np.sum(step * variance * lag, axis=1), np.sum(step * variance * lag * lag, axis=1)
    s = np.sqrt(shape.level)
    slope_unit, bend_unit = 0.5 * once / s**3, 0.125 * twice / s**4
    product = _ratio(slope_unit, shape.slope, -0.3)
    square = _ratio(bend_unit, shape.bend, 0.25) + 2.5 * product**2
    sigma = float(np.sqrt(np.clip(square, max((product / 0.9) ** 2, 0.01), 9.0)))
    rho = float(np.clip(product / sigma, -0.9, 0.9))
    levels = (v0 * share + theta * (1.0 - share)) * tau / shape.level - 1.0
    slopes = np.where(np.isfinite(shape.slope), shape.slope - product * slope_unit, 0.0)
    misfit = float(np.sum(0.25 * levels**2) + np.sum(slopes**2))
    return _Fit(misfit, {"v0": v0, "kappa": float(kappa), "theta": theta, "sigma": sigma, "rho": rho})


def _ratio(unit: Floats, found: Floats, otherwise: float) -> float:
    """Least squares of ``found = x unit`` over the slices that have it."""
    known = np.isfinite(found)
    if not known.any():
        return otherwise
    return float(np.sum(unit[known] * found[known]) / np.sum(unit[known] ** 2))


def _two_variances(basis: Floats, variance: Floats) -> tuple[float, float]:
    """``v0, theta`` from the mean variances, relative least squares with a slight pull toward each other, both kept
    positive."""
    pull = 0.02 * np.array([[1.0, -1.0]])
    rows = np.concatenate([basis / variance[:, None], pull / variance.mean()])
    v0, theta = np.linalg.lstsq(rows, np.append(np.ones(variance.shape), 0.0), rcond=None)[0]
    least = max(0.1 * float(variance.min()), _LEAST_VARIANCE)
    most = 4.0 * float(variance.max())
    return float(np.clip(v0, least, most)), float(np.clip(theta, least, most))
