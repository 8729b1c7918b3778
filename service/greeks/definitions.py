"""Unit and definition of every Greek and of sensitivities, once: for answers, for the document and for /v1/models."""

from __future__ import annotations

from functools import lru_cache
from typing import Final, NamedTuple

import orjson

from engine import MODELS

__all__ = ["GREEK_TERMS", "Term", "definitions"]


class Term(NamedTuple):
    """Unit and definition in words; ``{base}`` stands for spot or forward."""

    unit: str
    definition: str


_FIXED: Final = "at fixed model parameters"
_BLACK: Final = "at the model's own implied volatility of the strike"
GREEK_TERMS: Final[dict[str, Term]] = {
    "delta": Term("price per 1.00 of {base}", f"First derivative of the price with respect to {{base}}, {_FIXED}."),
    "gamma": Term(
        "price per 1.00 of {base} squared", f"Second derivative of the price with respect to {{base}}, {_FIXED}."
    ),
    "minimum_variance_delta": Term(
        "price per 1.00 of {base}",
        "delta + (rho sigma / {base}) dV/dv0: the hedge in the underlying alone that leaves the least variance of the "
        "diffusive moves. With two variance factors, the sum over them, each weighted by its share of the "
        "instantaneous variance.",
    ),
    "theta": Term(
        "price per year",
        "-dV/d(expiry): what the price loses as a year of expiry goes by, linearly, at fixed {base}, model parameters "
        "and continuous market rates. Divide by 365 for a calendar day.",
    ),
    "rho": Term(
        "price per 1.00 of the continuous rate",
        "dV/d(rate) at fixed spot and dividend yield: forward and discount factor both move. Divide by 10000 for a "
        "basis point.",
    ),
    "vega": Term(
        "price per 1.00 of volatility", f"Black's first derivative by the volatility, {_BLACK}. Divide by 100 for 1 %."
    ),
    "vanna": Term(
        "price per 1.00 of volatility and 1.00 of {base}",
        f"Black's derivative by the volatility and {{base}}, {_BLACK}.",
    ),
    "volga": Term("price per 1.00 of volatility squared", f"Black's second derivative by the volatility, {_BLACK}."),
    "black_delta": Term(
        "price per 1.00 of {base}",
        f"Black's first derivative by {{base}}, {_BLACK}, which stays with the strike (sticky strike).",
    ),
    "black_gamma": Term(
        "price per 1.00 of {base} squared",
        f"Black's second derivative by {{base}}, {_BLACK}, which stays with the strike (sticky strike).",
    ),
}
_SENSITIVITY: Final = "dV/d({name}), everything else fixed, spot or forward included. {description}"


@lru_cache(maxsize=256)
def definitions(model: str, greeks: tuple[str, ...], *, sensitivities: bool, base: str) -> orjson.Fragment:
    """The member ``definitions`` of an answer, encoded: of ``greeks`` with respect to ``base``, and of the
    model's parameters if ``sensitivities``. Two maps, since Heston's parameters are called theta and rho too."""
    told = {
        name: {key: text.replace("{base}", base) for key, text in GREEK_TERMS[name]._asdict().items()}
        for name in greeks
    }
    found = {"greeks": told}
    if sensitivities:
        found["sensitivities"] = {
            spec.name: {
                "unit": f"price per 1.00 of {spec.name}, whose unit is: {spec.unit}",
                "definition": _SENSITIVITY.format(name=spec.name, description=spec.description),
            }
            for spec in MODELS[model].parameters
        }
    return orjson.Fragment(orjson.dumps(found))
