"""Which kernels a set of Greeks needs, their values by name, and Black's Greeks of vanillas and digitals with their
slopes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import ndtr

from engine.arrays import Floats
from engine.protocols import Model
from engine.transform.kernels import DENSITY, DENSITY_SLOPE, DIGITAL, SHARE_DIGITAL, VANILLA, Kernel

__all__ = ["BlackColumns", "KernelTable", "black_columns", "kernels_for"]


def kernels_for(
    kind: type[Model], greeks: Sequence[str], sensitivities: bool, *, vanilla: bool, digital: bool
) -> list[Kernel]:
    """Kernels for the Greeks of one kind of model, the vanilla first."""
    out = [VANILLA] + ([DIGITAL] if digital else [])
    first = bool({"delta", "minimum_variance_delta", "theta", "rho"} & set(greeks))
    if first and vanilla:
        out.append(SHARE_DIGITAL)
    if "gamma" in greeks or (first and digital):
        out.append(DENSITY)
    if "gamma" in greeks and digital:
        out.append(DENSITY_SLOPE)
    names = kind.sensitivity_names
    parameters: set[int] = set(range(len(names))) if sensitivities else set()
    if "minimum_variance_delta" in greeks:
        parameters |= {i for i, name in enumerate(names) if name.split(".")[-1] == "v0"}
    if "theta" in greeks:
        parameters.add(len(names))
    for index in sorted(parameters):
        growth = kind.gradient_growth
        out += ([VANILLA.by(index, growth)] if vanilla else []) + ([DIGITAL.by(index, growth)] if digital else [])
    return out


@dataclass(frozen=True, slots=True)
class KernelTable:
    """Values and bounds (K, n) of a group, by kernel."""

    kernels: list[Kernel]
    value: Floats
    bound: Floats

    def _row(self, kernel: Kernel) -> tuple[Floats, Floats]:
        i = self.kernels.index(kernel)
        return self.value[i], self.bound[i]

    @property
    def vanilla_bound(self) -> Floats:
        """Of the out-of-the-money value per unit forward."""
        return np.asarray(self.bound[0])

    @property
    def share_digital(self) -> tuple[Floats, Floats]:
        """``E[e^X; X > k]`` for ``k >= 0``, ``E[e^X; X < k]`` for ``k < 0``."""
        return self._row(SHARE_DIGITAL)

    @property
    def density(self) -> tuple[Floats, Floats]:
        """``f(k)``."""
        return self._row(DENSITY)

    @property
    def density_slope(self) -> tuple[Floats, Floats]:
        """``f'(k)``."""
        return self._row(DENSITY_SLOPE)

    def by_parameter(self, index: int, *, digital: bool) -> tuple[Floats, Floats]:
        """``d c / d parameter`` or ``d P(X > k) / d parameter``."""
        base = DIGITAL if digital else VANILLA
        i = next(i for i, k in enumerate(self.kernels) if k.name == base.name and k.parameter == index)
        return self.value[i], self.bound[i]


@dataclass(frozen=True, slots=True)
class BlackColumns:
    """Black quantities by name: per unit forward for vanillas, per unit of money times the forward for digitals;
    their slopes in the volatility; the vanilla's vega; and how steep the formulas are in their arguments."""

    columns: dict[str, Floats]
    slopes: dict[str, Floats]
    vanilla_vega: Floats
    steepness: Floats


def black_columns(k: Floats, vols: Floats, tau: Floats, *, call: Any, digital: Any) -> BlackColumns:
    """Black's vega, vanna, volga, delta and gamma, (n,) each, of vanillas and of digitals.

    With ``n`` the normal density, ``P = N(d2)``, ``g = n(d2) / s``: ``dP/dF = g / F``, ``d2P/dF2 = -(g / F^2) d1 / s``,
    ``dP/ds = -n(d2) d1 / s = -g d1``. Slopes in ``s`` by ``dd1/ds = -d2 / s`` and ``dd2/ds = -d1 / s``. NaN where
    ``vols`` is.
    """
    root = np.sqrt(tau)
    s = vols * root
    sign = np.where(call, 1.0, -1.0)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
        d1 = -k / s + 0.5 * s
        d2 = d1 - s
        n1 = np.exp(-0.5 * d1 * d1) / np.sqrt(2.0 * np.pi)
        g = np.exp(-0.5 * d2 * d2) / np.sqrt(2.0 * np.pi) / s
        vanilla = {
            "vega": n1,
            "vanna": -n1 * d2 / s,
            "volga": n1 * d1 * d2 / s,
            "black_delta": sign * ndtr(sign * d1),
            "black_gamma": n1 / s,
        }
        vanilla_slope = {
            "vega": n1 * d1 * d2 / s,
            "vanna": -n1 * (d1 * d2 * d2 - d1 - d2) / s**2,
            "volga": n1 * (d1 * d1 * d2 * d2 - d1 * d1 - d2 * d2 - d1 * d2) / s**2,
            "black_delta": -n1 * d2 / s,
            "black_gamma": n1 * (d1 * d2 - 1.0) / s**2,
        }
        cash = {
            "vega": -sign * g * d1,
            "vanna": sign * g * (d1 * d2 - 1.0) / s,
            "volga": sign * g * (d1 + d2 - d1 * d1 * d2) / s,
            "black_delta": sign * g,
            "black_gamma": -sign * g * d1 / s,
        }
        cash_slope = {
            "vega": sign * g * (d1 + d2 - d1 * d1 * d2) / s,
            "vanna": sign * g * (d1 * d2 * (d1 * d2 - 1.0) - (d1 * d1 + d2 * d2) - 2.0 * (d1 * d2 - 1.0)) / s**2,
            "volga": sign * g * _volga_slope(d1, d2) / s**2,
            "black_delta": sign * g * (d1 * d2 - 1.0) / s,
            "black_gamma": sign * g * (d1 + d2 - d1 * (d1 * d2 - 1.0)) / s**2,
        }
    powers = {"vega": root, "vanna": root, "volga": tau, "black_delta": 1.0, "black_gamma": 1.0}
    columns = {name: np.where(digital, cash[name], vanilla[name]) * powers[name] for name in powers}
    slopes = {name: np.where(digital, cash_slope[name], vanilla_slope[name]) * powers[name] * root for name in powers}
    return BlackColumns(columns, slopes, n1 * root, 2.0 + d1 * d1 + d2 * d2)


def _volga_slope(d1: Floats, d2: Floats) -> Floats:
    """``s^2 / g`` times the slope in ``s`` of ``g (d1 + d2 - d1^2 d2) / s``."""
    inner = d1 + d2 - d1 * d1 * d2
    return np.asarray((d1 * d2 - 2.0) * inner - (d1 + d2) + 2.0 * d1 * d2 * d2 + d1**3)
