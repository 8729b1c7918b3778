"""The engine's models in words."""

from __future__ import annotations

from typing import Any

from engine import MODELS, Model, ParameterSpec, Payoff
from service.terms.models import example_of, greeks_of

__all__ = ["models_answer"]

_OUTPUTS = ("price", "implied_vol", "error_bound")


def models_answer() -> dict[str, Any]:
    """The answer of ``GET /v1/models``."""
    return {"models": [_model(kind) for kind in MODELS.values()]}


def _model(kind: type[Model]) -> dict[str, Any]:
    return {
        "name": kind.name,
        "title": kind.title,
        "source": kind.source,
        "parameters": [_parameter(kind.name, spec) for spec in kind.parameters],
        "outputs": _OUTPUTS,
        "greeks": greeks_of(kind.name),
        "sensitivities": kind.sensitivity_names,
        "payoffs": [payoff.word for payoff in Payoff],
    }


def _parameter(model: str, spec: ParameterSpec) -> dict[str, Any]:
    return {
        "name": spec.name,
        "description": spec.description,
        "unit": spec.unit,
        "lower": spec.lower,
        "upper": spec.upper,
        "lower_open": spec.lower_open,
        "upper_open": spec.upper_open,
        "allowed": spec.allowed,
        "example": example_of(model, spec.name),
    }
