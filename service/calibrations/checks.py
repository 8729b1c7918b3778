"""What a calibration request must satisfy beyond its schema, found before the job is accepted."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from engine import MODELS, ParameterSpec
from service.calibrations.requests import CalibrationAsked, SurfaceAsked, VolsAsked, VolSliceAsked
from service.problems import Fault, Problem
from service.settings import Settings
from service.terms.chain import ChainExpiryAsked, check_chain
from service.terms.mapping import Faults, SliceTerms, check_sizes, resolve

__all__ = ["SurfaceTerms", "check", "parameter_names", "surface_terms"]


@dataclass(frozen=True, slots=True)
class SurfaceTerms:
    """Years to the expiries of a chain, or the terms of slices of volatilities; one of the two is there."""

    chain_years: list[float] | None
    vol_terms: list[SliceTerms] | None


def check(asked: CalibrationAsked, settings: Settings) -> int:
    """Count the surfaces; raises Problem with every fault found."""
    if len(asked.surfaces) > settings.max_surfaces:
        detail = f"has {len(asked.surfaces)} entries; the limit is {settings.max_surfaces}"
        detail = f"{detail} (setting SMILEWRIGHT_MAX_SURFACES)"
        raise Problem("limit-exceeded", f"/surfaces {detail}.", faults=[Fault("/surfaces", detail)])
    check_sizes([one for surface in asked.surfaces for one in _expiries(surface)], settings, name="surfaces")
    faults = Faults()
    seen: dict[str, int] = {}
    for i, surface in enumerate(asked.surfaces):
        first = seen.setdefault(surface.id, i)
        if first != i:
            faults.add(f"is the id of surface {first} too; each needs its own", "surfaces", i, "id")
        surface_terms(surface, faults.under("surfaces", i))
    _check_parameters(asked, faults)
    faults.refuse()
    return len(asked.surfaces)


def surface_terms(surface: SurfaceAsked, faults: Faults) -> SurfaceTerms:
    """Terms of one surface; what is wrong with it is noted."""
    if (surface.chain is None) == (surface.vols is None):
        faults.add("needs chain or vols, one of the two")
        return SurfaceTerms(None, None)
    if surface.chain is not None:
        return SurfaceTerms(check_chain(surface.chain, faults.under("chain")), None)
    assert surface.vols is not None
    inside = faults.under("vols")
    _check_columns(surface.vols, inside)
    return SurfaceTerms(None, resolve(surface.vols, surface.vols.slices, inside, alive=True))


def parameter_names(model: str) -> tuple[str, ...]:
    """The names by which settings and results know a model's parameters."""
    return MODELS[model].sensitivity_names


def _expiries(surface: SurfaceAsked) -> Sequence[ChainExpiryAsked | VolSliceAsked]:
    if surface.chain is not None:
        return surface.chain.expiries
    return surface.vols.slices if surface.vols is not None else []


def _check_columns(vols: VolsAsked, faults: Faults) -> None:
    for i, one in enumerate(vols.slices):
        for name in ("implied_vols", "bid_vols", "ask_vols"):
            column = getattr(one, name)
            if column is not None and len(column) != len(one.strikes):
                detail = f"has {len(column)} entries for {len(one.strikes)} strikes; give one per strike"
                faults.add(detail, "slices", i, name)
        if (one.bid_vols is None) != (one.ask_vols is None):
            missing = "bid_vols" if one.bid_vols is None else "ask_vols"
            faults.add("is required where the other side is given", "slices", i, missing)


def _check_parameters(asked: CalibrationAsked, faults: Faults) -> None:
    for name, (low, high) in asked.bounds.items():
        if _known(asked.model, name, faults, "bounds", name) and not low < high:
            faults.add(f"is [{low:g}, {high:g}]; the first must be below the second", "bounds", name)
    _check_values(asked.model, asked.fixed.items(), faults, "fixed")
    _check_values(asked.model, asked.start.items(), faults, "start")
    if asked.prior is not None:
        _check_values(asked.model, asked.prior.parameters.items(), faults, "prior", "parameters")
    for name in asked.fixed:
        if name in asked.bounds:
            faults.add("is fixed, and has bounds too: give one of them", "bounds", name)


def _check_values(model: str, values: Iterable[tuple[str, float]], faults: Faults, *at: str) -> None:
    for name, value in values:
        if _known(model, name, faults, *at, name):
            spec = _spec(model, name)
            if not spec.admits(value):
                faults.add(f"is {value:g}; allowed: {spec.allowed}", *at, name)


def _known(model: str, name: str, faults: Faults, *at: str) -> bool:
    names = parameter_names(model)
    if name in names:
        return True
    faults.add(f"is no parameter of {model}; those are {', '.join(names)}", *at)
    return False


def _spec(model: str, name: str) -> ParameterSpec:
    (found,) = (spec for spec in MODELS[model].parameters if spec.name == name)
    return found
