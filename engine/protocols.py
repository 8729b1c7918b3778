"""What the rooms expect of one another, as structural types.

A model object holds either plain floats (one parameter set) or float64 columns of shape ``(rows, 1)`` (many sets
at once); every method broadcasts its parameters against its arguments. ``tau`` is in years, ``z`` is the complex
argument of the characteristic function of ``X = ln(S_T / F)``, ``p`` a real moment order.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, ClassVar, Protocol, Self

from engine.arrays import Complexes, Floats, Ints

__all__ = ["CfGradient", "Model", "ParameterSpec"]


@dataclass(frozen=True, slots=True)
class ParameterSpec:
    """One parameter of a model: its name, unit, admissible range and meaning in words."""

    name: str
    unit: str
    lower: float
    upper: float
    description: str
    lower_open: bool = False
    upper_open: bool = False

    @property
    def allowed(self) -> str:
        """The range in words, e.g. ``"-1 < rho < 1"``."""
        left = "<" if self.lower_open else "<="
        right = "<" if self.upper_open else "<="
        return f"{self.lower:g} {left} {self.name} {right} {self.upper:g}"

    def admits(self, value: float) -> bool:
        """Whether ``value`` lies in the range (false for NaN)."""
        low = self.lower < value if self.lower_open else self.lower <= value
        high = value < self.upper if self.upper_open else value <= self.upper
        return low and high


@dataclass(frozen=True, slots=True)
class CfGradient:
    """``log phi``, the cap on its rounding error in units of machine epsilon, its derivatives by every parameter and,
    last, by ``tau`` (P + 1, ...), and the caps on theirs."""

    log_value: Complexes
    size: Floats
    gradient: Complexes
    gradient_size: Floats


class Model(Protocol):
    """A published model of one underlying, as the transform sees it."""

    name: ClassVar[str]
    title: ClassVar[str]
    source: ClassVar[str]
    parameters: ClassVar[tuple[ParameterSpec, ...]]
    sensitivity_names: ClassVar[tuple[str, ...]]
    gradient_growth: ClassVar[int]
    """No ``d log phi / d parameter`` grows faster than ``|z|`` to this power along a line, 1 or 2."""

    @classmethod
    def stack(cls, models: Sequence[Self]) -> Self:
        """One object with columns of shape (rows, 1) out of many with floats."""
        ...

    def take(self, index: Ints) -> Self:
        """Of a stacked object, the rows at ``index`` (shape (m,)): columns of shape (m, 1)."""
        ...

    def columns(self) -> Floats:
        """Of a stacked object, all parameters side by side, (rows, P): what tells two rows apart."""
        ...

    def check(self) -> None:
        """Raise InputError naming the first parameter outside its range."""
        ...

    def log_cf(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> Complexes:
        """``log E[exp(i z X)]``. With ``along_path`` the last axis of ``z`` is a path that starts inside the
        strip and avoids the imaginary axis; the logarithm is then continued along it."""
        ...

    def log_cf_sized(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> tuple[Complexes, Floats]:
        """``log_cf`` and the cap on its absolute rounding error, in units of machine epsilon, in one evaluation."""
        ...

    def log_cf_gradient(self, z: Complexes, tau: Floats | float, *, along_path: bool = False) -> CfGradient:
        """``log_cf_sized`` with the derivatives by the parameters, in the order of ``sensitivity_names``, and by
        ``tau``."""
        ...

    def log_moment(self, p: Floats, tau: Floats | float) -> Floats:
        """``log E[exp(p X)]`` for real ``p`` inside the strip."""
        ...

    def strip(self, tau: Floats | float, *, precise: bool = False) -> tuple[Floats, Floats]:
        """``(p_lo, p_hi)``: inner approximations of the open interval of finite moments (may be -inf, inf), to
        1e-3 of the distance from 0 or 1, which is all a plan needs, or to rounding if ``precise``."""
        ...

    def log_envelope(self, p: Floats, u: Floats, tau: Floats | float) -> Floats:
        """A proven majorant of ``log |phi(u - i p)|``, non-increasing in ``u >= 0``."""
        ...

    def mean_variance(self, tau: Floats | float) -> Floats:
        """The expected quadratic variation over ``tau``: the scale of the density, squared."""
        ...

    def variance_weights(self) -> list[tuple[int, Any]]:
        """Per variance factor: the place of its ``v0`` among the sensitivities, and ``w rho sigma`` with ``w`` its
        share of the instantaneous variance; empty where there is none."""
        ...

    def bend(self, tau: float) -> tuple[float, float]:
        """``(k_inf, angle)`` of one parameter set: ``phi(z) ~ exp(i z k_inf)`` far out in the right half plane, and
        the widest angle from the real axis within which ``phi`` stays bounded there, at most pi/2."""
        ...
