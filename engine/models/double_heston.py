"""Double Heston (Christoffersen, Heston and Jacobs 2009): two independent variance factors, each with its own
correlation.

``log phi`` is the sum of two of Heston's (``engine.models.heston``); so are the envelopes, since the moduli multiply.
The strip is the intersection of theirs.

Source: P. Christoffersen, S. Heston, K. Jacobs, "The shape and term structure of the index option smirk: why
multifactor stochastic volatility models work so well", Management Science 55(12), 2009.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, ClassVar, Self

import numpy as np

from engine.arrays import Complexes, Floats, Ints
from engine.errors import InputError
from engine.models.heston import HESTON_PARAMETERS, Heston
from engine.models.parameters import check_parameters
from engine.protocols import CfGradient, ParameterSpec

__all__ = ["DoubleHeston"]


@dataclass(frozen=True, slots=True)
class DoubleHeston:
    """The double Heston model: ``factors``, two of Heston's parameter sets, with floats or stacked."""

    factors: tuple[Heston, Heston]

    name: ClassVar[str] = "double_heston"
    title: ClassVar[str] = "Double Heston stochastic volatility"
    source: ClassVar[str] = "P. Christoffersen, S. Heston, K. Jacobs, Management Science 55(12), 2009"
    parameters: ClassVar[tuple[ParameterSpec, ...]] = tuple(
        replace(spec, name=f"factors.{i}.{spec.name}") for i in (0, 1) for spec in HESTON_PARAMETERS
    )
    sensitivity_names: ClassVar[tuple[str, ...]] = tuple(
        f"factors.{i}.{spec.name}" for i in (0, 1) for spec in HESTON_PARAMETERS
    )

    gradient_growth: ClassVar[int] = 2

    @classmethod
    def stack(cls, models: Sequence[Self]) -> Self:
        """One object with stacked factors."""
        first, second = (Heston.stack([model.factors[i] for model in models]) for i in (0, 1))
        return cls((first, second))

    def take(self, index: Ints) -> Self:
        """Of a stacked object, the rows at ``index``."""
        first, second = (factor.take(index) for factor in self.factors)
        return type(self)((first, second))

    def columns(self) -> Floats:
        """All parameters side by side, (rows, 10)."""
        return np.concatenate([factor.columns() for factor in self.factors], axis=1)

    def check(self) -> None:
        """Raise InputError naming the first parameter outside its range."""
        if len(self.factors) != 2:
            raise InputError("model.factors", f"has {len(self.factors)} entries", allowed="two factors")
        for i, factor in enumerate(self.factors):
            check_parameters(factor, HESTON_PARAMETERS, prefix=f"model.factors.{i}")

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``, shape of ``z`` broadcast with the parameters. ``tau`` in years, > 0."""
        first, second = (factor.log_cf(z, tau, along_path=along_path) for factor in self.factors)
        return first + second

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error in units of machine epsilon."""
        first, second = (factor.log_cf_sized(z, tau, along_path=along_path) for factor in self.factors)
        return first[0] + second[0], first[1] + second[1]

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` and the derivatives by the parameters and tau."""
        first, second = (factor.log_cf_gradient(z, tau, along_path=along_path) for factor in self.factors)
        return CfGradient(
            first.log_value + second.log_value,
            first.size + second.size,
            np.concatenate([first.gradient[:5], second.gradient[:5], first.gradient[5:] + second.gradient[5:]]),
            np.concatenate(
                [first.gradient_size[:5], second.gradient_size[:5], first.gradient_size[5:] + second.gradient_size[5:]]
            ),
        )

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)]`` for real ``p`` inside the strip."""
        return self.factors[0].log_moment(p, tau) + self.factors[1].log_moment(p, tau)

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """The sum of the two envelopes."""
        return self.factors[0].log_envelope(p, u, tau) + self.factors[1].log_envelope(p, u, tau)

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """The intersection of the two strips."""
        first, second = (factor.strip(tau, precise=precise) for factor in self.factors)
        return np.maximum(first[0], second[0]), np.minimum(first[1], second[1])

    def mean_variance(self, tau: Floats | float) -> Floats:
        """The sum of the two factors'."""
        return np.asarray(self.factors[0].mean_variance(tau) + self.factors[1].mean_variance(tau))

    def variance_weights(self) -> list[tuple[int, Any]]:
        """Each factor's ``rho sigma`` times its share of the instantaneous variance; even shares where that is zero."""
        first, second = self.factors
        total = first.v0 + second.v0
        share = np.where(total > 0.0, first.v0 / np.where(total > 0.0, total, 1.0), 0.5)
        return [(0, share * first.rho * first.sigma), (5, (1.0 - share) * second.rho * second.sigma)]

    def bend(self, tau: float) -> tuple[float, float]:
        """The sum of the two ``k_inf``; analytic off the imaginary axis like each factor."""
        return self.factors[0].bend(tau)[0] + self.factors[1].bend(tau)[0], 0.5 * np.pi
