"""The ``model`` of a request: one schema per model of the engine, told apart by ``name``.

Made from the engine's own parameter lists, so that a model entered there appears here with its ranges and units. A
parameter named ``factors.0.rho`` is the ``rho`` of the first of the objects in the array ``factors``.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import reduce
from operator import or_
from typing import TYPE_CHECKING, Annotated, Any, Final, Literal, TypeAlias

from pydantic import Field, create_model

from engine import GREEKS, MODELS, Model, ParameterSpec
from service.fields import Asked, described

__all__ = ["AnyModel", "ModelAsked", "engine_model", "example_of", "greeks_of"]

# One example per parameter. Heston's are the published set of A. Lewis, "Heston Model Reference Prices" (2019),
# Variance Gamma's that of Fang and Oosterlee (2008) and Kou's jumps those of Kou (2002), both from memory; the rest are
# ordinary values.
_EXAMPLES: Final[dict[str, float]] = {
    "volatility": 0.2,
    "v0": 0.04,
    "kappa": 4.0,
    "theta": 0.25,
    "sigma": 1.0,
    "rho": -0.5,
    "jump_intensity": 0.5,
    "jump_mean": -0.1,
    "jump_stdev": 0.15,
    "variance_gamma.sigma": 0.12,
    "variance_gamma.theta": -0.14,
    "variance_gamma.nu": 0.2,
    "up_probability": 0.4,
    "up_rate": 10.0,
    "down_rate": 5.0,
    "factors.1.kappa": 1.0,
    "factors.1.theta": 0.04,
    "factors.1.sigma": 0.3,
}


class ModelAsked(Asked):
    """What every ``model`` object has."""

    name: str


def example_of(model: str, parameter: str) -> float:
    """An ordinary value of a parameter: that of the model, of the place in it, or of the name alone; for a name that is
    not known here, the middle of its range."""
    plain = parameter.rpartition(".")[2]
    for name in (f"{model}.{parameter}", parameter, plain):
        if name in _EXAMPLES:
            return _EXAMPLES[name]
    (spec,) = (spec for spec in MODELS[model].parameters if spec.name == parameter)
    return 0.5 * (spec.lower + spec.upper)


def _field(model: str, spec: ParameterSpec) -> Any:
    """The field of one parameter."""
    limits = {"gt" if spec.lower_open else "ge": spec.lower, "lt" if spec.upper_open else "le": spec.upper}
    return described(spec.description, unit=spec.unit, example=example_of(model, spec.name), **limits)


def _fields(model: str, specs: Sequence[ParameterSpec]) -> dict[str, Any]:
    """Fields of an object, those of an inner array of objects under the array's name."""
    fields: dict[str, Any] = {spec.name: (float, _field(model, spec)) for spec in specs if "." not in spec.name}
    arrays: dict[str, dict[int, list[ParameterSpec]]] = {}
    for spec in specs:
        if "." in spec.name:
            array, place, _ = spec.name.split(".")
            arrays.setdefault(array, {}).setdefault(int(place), []).append(spec)
    for array, places in arrays.items():
        inner: dict[str, Any] = {spec.name.rpartition(".")[2]: (float, _field(model, spec)) for spec in places[0]}
        title = _title(f"{model}_{array.removesuffix('s')}")
        one: Any = create_model(title, __base__=Asked, __doc__=f"One of the {array} of a model.", **inner)
        count = len(places)
        example = [
            {spec.name.rpartition(".")[2]: example_of(model, spec.name) for spec in some} for some in places.values()
        ]
        text = f"Its {array}, exactly {count}."
        fields[array] = (
            Annotated[list[one], Field(min_length=count, max_length=count)],
            described(text, unit="none", example=example),
        )
    return fields


def _title(name: str) -> str:
    return "".join(word.capitalize() for word in name.split("_"))


def _schema(kind: type[Model]) -> type[ModelAsked]:
    """The schema of one model of the engine."""
    fields = {
        "name": (Literal[kind.name], described("Which model.", unit="none", example=kind.name)),
        **_fields(kind.name, kind.parameters),
    }
    text = f"{kind.title}. Source: {kind.source}."
    ordinary = {name: said.examples[0] for name, (_, said) in fields.items()}
    return create_model(
        f"{_title(kind.name)}Model",
        __base__=ModelAsked,
        __doc__=text,
        __cls_kwargs__={"json_schema_extra": {"examples": [ordinary]}},
        **fields,
    )


_SCHEMAS: Final = {name: _schema(kind) for name, kind in MODELS.items()}

if TYPE_CHECKING:
    AnyModel: TypeAlias = ModelAsked
else:
    AnyModel = Annotated[reduce(or_, _SCHEMAS.values()), Field(discriminator="name")]


def engine_model(asked: ModelAsked) -> Model:
    """The engine's model with the parameters of a request; ``factors`` are Heston's parameter sets."""
    kind: Any = MODELS[asked.name]
    values = {name: getattr(asked, name) for name in type(asked).model_fields if name != "name"}
    if "factors" in values:
        heston: Any = MODELS["heston"]
        values["factors"] = tuple(heston(**factor.model_dump()) for factor in values["factors"])
    model: Model = kind(**values)
    return model


def greeks_of(name: str) -> list[str]:
    """The Greeks that a model has: those of a variance factor only where there is one."""
    schema = _SCHEMAS[name]
    ordinary = {field: said.examples[0] for field, said in schema.model_fields.items() if said.examples}
    has_variance = bool(engine_model(schema.model_validate(ordinary)).variance_weights())
    return [greek for greek in GREEKS if has_variance or greek != "minimum_variance_delta"]
