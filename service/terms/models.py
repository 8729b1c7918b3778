"""The ``model`` of a request: one schema per model of the engine, told apart by ``name``.

Made from the engine's own parameter lists, so that a model entered there appears here with its ranges and units.
"""

from __future__ import annotations

from functools import reduce
from operator import or_
from typing import TYPE_CHECKING, Annotated, Any, Final, Literal, TypeAlias

from pydantic import Field, create_model

from engine import MODELS, Model, ParameterSpec
from service.fields import Asked, described

__all__ = ["EXAMPLES", "AnyModel", "ModelAsked", "engine_model"]

# One example per parameter name: the published set of A. Lewis, "Heston Model Reference Prices" (2019), where it has
# the parameter; plain values else.
EXAMPLES: Final[dict[str, float]] = {
    "volatility": 0.2,
    "v0": 0.04,
    "kappa": 4.0,
    "theta": 0.25,
    "sigma": 1.0,
    "rho": -0.5,
    "jump_intensity": 0.5,
    "jump_mean": -0.1,
    "jump_stdev": 0.15,
    "nu": 0.2,
}


class ModelAsked(Asked):
    """What every ``model`` object has."""

    name: str


def _parameter(spec: ParameterSpec) -> Any:
    """The field of one parameter."""
    limits = {"gt" if spec.lower_open else "ge": spec.lower, "lt" if spec.upper_open else "le": spec.upper}
    return described(spec.description, unit=spec.unit, example=EXAMPLES.get(spec.name, spec.upper), **limits)


def _schema(kind: type[Model]) -> type[ModelAsked]:
    """The schema of one model of the engine."""
    fields: dict[str, Any] = {
        "name": (Literal[kind.name], described("Which model.", unit="none", example=kind.name)),
        **{spec.name: (float, _parameter(spec)) for spec in kind.parameters},
    }
    title = "".join(word.capitalize() for word in kind.name.split("_"))
    return create_model(f"{title}Model", __base__=ModelAsked, __doc__=f"{kind.title}. Source: {kind.source}.", **fields)


_SCHEMAS: Final = {name: _schema(kind) for name, kind in MODELS.items()}

if TYPE_CHECKING:
    AnyModel: TypeAlias = ModelAsked
else:
    AnyModel = Annotated[reduce(or_, _SCHEMAS.values()), Field(discriminator="name")]


def engine_model(asked: ModelAsked) -> Model:
    """The engine's model with the parameters of a request."""
    kind: Any = MODELS[asked.name]
    model: Model = kind(**{spec.name: getattr(asked, spec.name) for spec in kind.parameters})
    return model
