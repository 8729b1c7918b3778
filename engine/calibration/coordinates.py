"""Parameters of a model to the coordinates the optimiser moves in, and back.

Variances, speeds, volatilities and other positive parameters move in their logarithm, the rest as they are: a step is
then relative, and the ridge along which mean reversion and vol of vol trade against each other is nearly straight.
Fixed parameters have no coordinate.

``feller="require"``: the condition ``2 kappa theta >= sigma^2`` (W. Feller, Annals of Mathematics 54, 1951) is no box.
One of the three parameters is therefore replaced by its place ``s`` in ``[0, 1]`` between its own ends and what the
condition leaves of them:

    sigma free                  sigma = low + s (min(high, sqrt(2 kappa theta)) - low)
    sigma fixed, theta free     theta = max(low, sigma^2 / (2 kappa)) + s (high - max(...))
    kappa alone free            kappa >= sigma^2 / (2 theta), a plain bound

so that every point of the search satisfies it, and a fit that the condition holds ends on the end of ``s``.

The room searched unless ``bounds`` say otherwise is narrower than what the models admit: outside it no equity, index or
currency surface is known to lie (common practice, no source).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from engine.arrays import Floats
from engine.calibration.records import CalibrationSettings
from engine.errors import InputError
from engine.models.double_heston import DoubleHeston
from engine.models.heston import Heston
from engine.protocols import Model, ParameterSpec

__all__ = ["Coordinates", "coordinates_of", "feller_ratio", "model_from"]

_ROOM: dict[str, tuple[float, float]] = {
    "v0": (1e-5, 4.0),
    "kappa": (1e-3, 50.0),
    "theta": (1e-5, 4.0),
    "sigma": (1e-3, 10.0),
    "rho": (-0.999, 0.999),
    "volatility": (1e-3, 4.0),
    "jump_intensity": (0.0, 20.0),
    "jump_mean": (-1.0, 1.0),
    "jump_stdev": (1e-4, 1.0),
    "nu": (1e-3, 10.0),
}
_DRIFT_ROOM = (-3.0, 3.0)  # the drift of Variance Gamma is called theta, but may have either sign
_LOGARITHMIC = ("v0", "kappa", "theta", "sigma", "volatility", "nu", "jump_stdev")
_ROUND = 4.0 * float(np.finfo(np.float64).eps)  # by which the Feller condition is kept in spite of rounding
_LEAST_RATIO = 1e-9  # of upper to lower end: narrower is fixed


def model_from(kind: type[Model], values: Mapping[str, float]) -> Model:
    """The model with these parameters by name."""
    if kind is DoubleHeston:
        first, second = (
            Heston(*(float(values[f"factors.{i}.{spec.name}"]) for spec in Heston.parameters)) for i in (0, 1)
        )
        return DoubleHeston((first, second))
    return kind(**{name: float(value) for name, value in values.items()})


def feller_ratio(values: Mapping[str, float]) -> float | None:
    """``2 kappa theta / sigma^2``, the smallest over the variance factors; None without one that moves."""
    ratios = []
    for prefix in _factors(values):
        kappa, theta, sigma = (values[prefix + name] for name in ("kappa", "theta", "sigma"))
        if sigma > 0.0:
            ratios.append(2.0 * kappa * theta / sigma**2)
    return float(min(ratios)) if ratios else None


def _factors(names: Any) -> list[str]:
    return [name[: -len("kappa")] for name in names if name.split(".")[-1] == "kappa"]


@dataclass(frozen=True, slots=True)
class _Feller:
    """The dependent parameter of one variance factor and the places of the three."""

    dependent: str
    kappa: int
    theta: int
    sigma: int

    @property
    def at(self) -> int:
        """Place of the dependent parameter."""
        return self.sigma if self.dependent == "sigma" else self.theta

    def dependent_name(self, names: tuple[str, ...]) -> str:
        """Its full name."""
        return names[self.at]


@dataclass(frozen=True, slots=True)
class Coordinates:
    """``names`` (P,) all parameters in the order of the model's sensitivities; ``fixed`` values, NaN where free;
    ``free`` places of the q coordinates; their ends ``low``, ``high`` in parameters and ``lower``, ``upper`` (q,) in
    coordinates."""

    names: tuple[str, ...]
    fixed: Floats
    free: list[int]
    logarithmic: np.ndarray
    low: Floats
    high: Floats
    lower: Floats
    upper: Floats
    feller: list[_Feller]

    def values(self, x: Floats) -> tuple[Floats, Floats]:
        """Parameters (P,) at ``x`` and their derivatives by it (P, q); NaN where nothing is admissible."""
        out = self.fixed.copy()
        slope = np.zeros((len(self.names), len(self.free)))
        moved = np.where(self.logarithmic, np.exp(np.where(self.logarithmic, x, 0.0)), x)
        out[self.free] = np.clip(moved, self.low, self.high)
        slope[self.free, np.arange(len(self.free))] = np.where(self.logarithmic, moved, 1.0)
        for one in self.feller:
            self._depend(one, x, out, slope)
        return out, slope

    def _depend(self, one: _Feller, x: Floats, out: Floats, slope: Floats) -> None:
        at = one.at
        q = self.free.index(at)
        low, high, share = self.low[q], self.high[q], x[q]
        kappa, theta, sigma = out[one.kappa], out[one.theta], out[one.sigma]
        by_others = np.zeros(len(self.free))
        if one.dependent == "sigma":
            cap = np.sqrt(2.0 * kappa * theta) * (1.0 - _ROUND)
            if cap < high:
                high = cap
            if 0.0 < cap == high:
                by_others = share * 0.5 * cap * (slope[one.kappa] / kappa + slope[one.theta] / theta)
        else:
            floor = 0.5 * sigma * sigma / kappa * (1.0 + _ROUND) if kappa > 0.0 else np.inf
            if low < floor <= high:
                by_others = -(1.0 - share) * floor * slope[one.kappa] / kappa
            low = max(low, floor)
        out[at] = low + share * (high - low) if high >= low else np.nan
        by_others[q] = high - low
        slope[at] = by_others

    def place(self, values: Floats) -> Floats:
        """The coordinates of the parameters (P,), moved into the room where they lie outside or on its edge."""
        wanted = np.clip(np.asarray(values, dtype=np.float64)[self.free], self.low, self.high)
        x = np.where(self.logarithmic, np.log(np.where(self.logarithmic, wanted, 1.0)), wanted)
        for one in self.feller:
            at = one.at
            q = self.free.index(at)
            x[q] = 0.5
            (low, high), others = self._ends(one, x, q)
            x[q] = np.clip((values[at] - low) / (high - low), 0.0, 0.95) if others and high > low else 0.5
        margin = 1e-3 * (self.upper - self.lower)
        return np.asarray(np.clip(x, self.lower + margin, self.upper - margin))

    def _ends(self, one: _Feller, x: Floats, q: int) -> tuple[tuple[float, float], bool]:
        ends = []
        for share in (0.0, 1.0):
            x[q] = share
            ends.append(float(self.values(x)[0][self.free[q]]))
        return (ends[0], ends[1]), bool(np.isfinite(ends).all())

    @property
    def ends(self) -> dict[str, tuple[float, float]]:
        """Ends of the free parameters by name."""
        rooms = zip(self.low.tolist(), self.high.tolist(), strict=True)
        return {self.names[i]: room for i, room in zip(self.free, rooms, strict=True)}

    def by_name(self, x: Floats) -> dict[str, float]:
        """Parameters by name at ``x``."""
        return dict(zip(self.names, self.values(x)[0].tolist(), strict=True))


def coordinates_of(kind: type[Model], settings: CalibrationSettings) -> Coordinates:
    """Coordinates of a model under the settings; raises InputError for names, values and bounds that do not fit."""
    specs = {spec.name: spec for spec in kind.parameters}
    for title, mapping in (("bounds", settings.bounds), ("fixed", settings.fixed), ("start", settings.start)):
        _known(title, mapping, specs)
    if settings.prior is not None:
        _known("prior.parameters", settings.prior.parameters, specs)
    names = kind.sensitivity_names
    fixed = np.array([float(settings.fixed.get(name, np.nan)) for name in names])
    ends = {name: _ends_of(name, specs[name], settings, kind) for name in names}
    for i, name in enumerate(names):
        low, high = ends[name]
        if np.isnan(fixed[i]) and (high - low) <= _LEAST_RATIO * max(abs(low), abs(high)):
            fixed[i] = low
    feller = _feller_of(names, fixed, ends) if settings.feller == "require" else []
    free = [i for i in range(len(names)) if np.isnan(fixed[i])]
    if not free:
        raise InputError("fixed", "leaves no parameter to fit", allowed="at least one free parameter")
    dependent = {one.at for one in feller}
    logarithmic = np.array(
        [names[i].split(".")[-1] in _LOGARITHMIC and ends[names[i]][0] > 0.0 and i not in dependent for i in free]
    )
    rooms = np.array([ends[names[i]] for i in free])
    coordinates = np.where(logarithmic[:, None], np.log(np.where(logarithmic[:, None], rooms, 1.0)), rooms)
    (low, high), (lower, upper) = rooms.T, coordinates.T.copy()
    for at in dependent:
        lower[free.index(at)], upper[free.index(at)] = 0.0, 1.0
    return Coordinates(names, fixed, free, logarithmic, low, high, lower, upper, feller)


def _known(title: str, mapping: Mapping[str, Any], specs: Mapping[str, ParameterSpec]) -> None:
    for name, value in mapping.items():
        if name not in specs:
            raise InputError(f"{title}.{name}", "is no parameter of the model", allowed=", ".join(specs))
        for one in value if title == "bounds" else (value,):
            if not specs[name].lower <= float(one) <= specs[name].upper:
                raise InputError(f"{title}.{name}", f"is {value!r}", allowed=specs[name].allowed)


def _ends_of(name: str, spec: ParameterSpec, settings: CalibrationSettings, kind: type[Model]) -> tuple[float, float]:
    """The ends of the room searched for one parameter, widened by a start, a prior or a fixed value outside it."""
    short = name.split(".")[-1]
    usual = _DRIFT_ROOM if short == "theta" and spec.lower < 0.0 else _ROOM.get(short, (spec.lower, spec.upper))
    if name in settings.bounds:
        low, high = (float(one) for one in settings.bounds[name])
        if not low <= high:
            raise InputError(f"bounds.{name}", f"is [{low!r}, {high!r}]", allowed="lower bound first")
        if name in settings.start and not low <= settings.start[name] <= high:
            raise InputError(
                f"start.{name}", f"is {settings.start[name]!r}", allowed=f"{low:g} to {high:g}, its bounds"
            )
    else:
        wanted = [settings.start.get(name, usual[0])]
        if settings.prior is not None:
            wanted.append(settings.prior.parameters.get(name, usual[0]))
        low, high = min(usual[0], *wanted), max(usual[1], *wanted)
    tiny = 1e-12 * (spec.upper - spec.lower)
    return (
        max(low, spec.lower + tiny) if spec.lower_open else low,
        min(high, spec.upper - tiny) if spec.upper_open else high,
    )


def _feller_of(names: tuple[str, ...], fixed: Floats, ends: dict[str, tuple[float, float]]) -> list[_Feller]:
    """Which parameter of each variance factor the condition makes dependent; a plain bound is put into ``ends``."""
    prefixes = _factors(names)
    if not prefixes:
        raise InputError("feller", "is 'require', but the model has no variance factor", allowed="'report'")
    out = []
    for prefix in prefixes:
        kappa, theta, sigma = (names.index(prefix + name) for name in ("kappa", "theta", "sigma"))
        if np.isnan(fixed[sigma]):
            out.append(_Feller("sigma", kappa, theta, sigma))
        elif np.isnan(fixed[theta]):
            out.append(_Feller("theta", kappa, theta, sigma))
        else:
            least = 0.5 * fixed[sigma] ** 2 / fixed[theta] * (1.0 + _ROUND) if fixed[theta] > 0.0 else np.inf
            low, high = ends[prefix + "kappa"]
            most = high if np.isnan(fixed[kappa]) else fixed[kappa]
            if least > most:
                raise InputError("feller", "is 'require', which the fixed parameters violate", allowed="'report'")
            ends[prefix + "kappa"] = (max(low, least), high)
    return out
