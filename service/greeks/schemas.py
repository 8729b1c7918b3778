"""Request and answer of ``POST /v1/greeks``."""

from __future__ import annotations

from typing import Annotated, Any, Final, Literal, TypeAlias

from pydantic import Field, create_model

from engine import GREEKS
from service.fields import Answer, described
from service.greeks.definitions import GREEK_TERMS
from service.terms.pricing_schemas import EXAMPLE as SMILES_EXAMPLE
from service.terms.pricing_schemas import PricingAsked, SmileAnswer
from service.terms.schemas import WarningAnswer

__all__ = ["EXAMPLE", "GreeksAnswer", "GreeksAsked"]

EXAMPLE: Final[dict[str, Any]] = {
    **SMILES_EXAMPLE,
    "greeks": ["delta", "gamma", "minimum_variance_delta", "theta", "rho", "vega"],
    "sensitivities": True,
}
_DEFAULT: Final = ("delta", "gamma")
GreekName: TypeAlias = Literal[GREEKS]  # type: ignore[valid-type]
Column: TypeAlias = list[float | None]


class GreeksAsked(PricingAsked):
    """Price slices under a model, with derivatives."""

    greeks: Annotated[list[GreekName], Field(max_length=32)] = described(
        "Which Greeks; the answer's definitions say what each is. minimum_variance_delta needs a model with a variance "
        "factor; /v1/models says which model has what.",
        unit="none",
        example=list(EXAMPLE["greeks"]),
        default=_DEFAULT,  # a tuple: a list is copied for every request
    )
    sensitivities: bool = described(
        "Whether to answer derivatives of the price by every parameter of the model.",
        unit="none",
        example=True,
        default=False,
    )


def _columns(title: str, text: str, *, bound: bool) -> Any:
    """A schema with one column per Greek; ``bound``: of the bounds on their errors."""
    fields: dict[str, Any] = {}
    for name, term in GREEK_TERMS.items():
        unit = term.unit.replace("{base}", "spot or forward")
        what = term.definition.replace("{base}", "spot or forward")
        said = f"Absolute bound on the error of {name} as returned." if bound else what
        fields[name] = (Column | None, described(said, unit=unit, example=[1e-13 if bound else 0.5], default=None))
    return create_model(title, __base__=Answer, __doc__=text, **fields)


GreekColumns: Any = _columns("GreekColumns", "Greeks asked for; one number per strike each.", bound=False)
GreekBounds: Any = _columns("GreekBounds", "Error bounds of the Greeks asked for.", bound=True)


class GreekSliceAnswer(SmileAnswer):
    """One expiry priced, with its Greeks; columns in the order of the strikes sent."""

    with_respect_to: Literal["spot", "forward"] = described(
        "What delta, gamma and their relatives are derivatives by: spot where market was given, forward otherwise.",
        unit="none",
        example="spot",
    )
    greek_statuses: list[Literal["ok", "no_implied_vol", "no_bound"]] = described(
        "Per strike: ok; no_implied_vol (Black quantities are null, for the reason in statuses); no_bound (a number "
        "with which no error bound could be given is null).",
        unit="none",
        example=["ok", "ok"],
    )
    greeks: GreekColumns = described(
        "The Greeks asked for; null where greek_statuses says why.",
        unit="that of each one",
        example={"delta": [0.5994713257500281], "gamma": [0.00928753738]},
    )
    greek_error_bounds: GreekBounds | None = described(
        "Absolute bounds on the errors of the Greeks as returned; there if error_bound is among outputs.",
        unit="that of each one",
        example={"delta": [1.3e-14], "gamma": [2.2e-16]},
        default=None,
    )
    sensitivities: dict[str, Column] | None = described(
        "Derivatives of the price by the parameters of the model, named as in the request; factors.0.rho is the rho of "
        "the first object in the array factors. There if asked for.",
        unit="price per 1.00 of the parameter",
        example={"v0": [10.1792654044795], "kappa": [0.689854176691162]},
        default=None,
    )
    sensitivity_error_bounds: dict[str, Column] | None = described(
        "Absolute bounds on the errors of the sensitivities as returned; there if error_bound is among outputs.",
        unit="that of each one",
        example={"v0": [1.5e-12], "kappa": [1.1e-13]},
        default=None,
    )


class DefinitionAnswer(Answer):
    """What a number is."""

    unit: str = described("Its unit.", unit="none", example="price per 1.00 of spot")
    definition: str = described(
        "What it is, in words.",
        unit="none",
        example="First derivative of the price with respect to spot, at fixed model parameters.",
    )


_DELTA: Final = {
    "delta": {name: text.replace("{base}", "spot") for name, text in GREEK_TERMS["delta"]._asdict().items()}
}
_V0: Final = {"v0": {"unit": "price per 1.00 of v0", "definition": "dV/d(v0), everything else fixed."}}


class DefinitionsAnswer(Answer):
    """What every number returned is; Greeks and sensitivities apart, since Heston's parameters are called theta and
    rho too."""

    greeks: dict[str, DefinitionAnswer] = described("Of each Greek returned.", unit="none", example=_DELTA)
    sensitivities: dict[str, DefinitionAnswer] | None = described(
        "Of each sensitivity returned; there if they were asked for.", unit="none", example=_V0, default=None
    )


class GreeksAnswer(Answer):
    """Slices in the order sent."""

    slices: list[GreekSliceAnswer] = described(
        "One entry per slice sent.",
        unit="none",
        example=[
            {
                "expiry": 1.0,
                "forward": 99.00498337491681,
                "discount_factor": 0.9900498337491681,
                "strikes": [100.0],
                "payoffs": ["call"],
                "statuses": ["ok"],
                "prices": [16.07015491702883],
                "transform": {"method": "contour_fft", "exponents": [0.5], "nodes": 56},
                "with_respect_to": "spot",
                "greek_statuses": ["ok"],
                "greeks": {"delta": [0.5994713257500281]},
            }
        ],
    )
    definitions: DefinitionsAnswer = described(
        "Unit and definition of each number returned.", unit="none", example={"greeks": _DELTA}
    )
    warnings: list[WarningAnswer] = described(
        "Admissible values that look like slips of units; empty if there are none.",
        unit="none",
        example=[],
    )
