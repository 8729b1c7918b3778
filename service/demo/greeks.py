"""The demo's Greeks: one expiry under the fitted model, derivatives by spot, and what each number is."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Final

from service.demo.tables import number, table

__all__ = ["show_greeks"]

_SHOWN: Final = 9  # strikes, those around the forward
_GREEKS: Final = ("delta", "minimum_variance_delta", "gamma", "vega", "theta", "rho")
_FORMS: Final = {"delta": ".4f", "minimum_variance_delta": ".4f", "gamma": ".6f"}


def show_greeks(
    post: Callable[[str, dict[str, Any]], dict[str, Any]],
    *,
    spot: float,
    expiry: dict[str, Any],
    named: str,
    model: dict[str, Any],
) -> str:
    """Greeks and sensitivities of out-of-the-money options around the forward. ``expiry``: an expiry of a
    /v1/chains answer; rate and dividend yield are those that its forward and discount factor imply."""
    years, forward = expiry["expiry"], expiry["forward"]
    rate = -math.log(expiry["discount_factor"]) / years
    strikes = sorted(sorted(expiry["strikes"], key=lambda strike: abs(strike - forward))[:_SHOWN])
    dividend_yield = rate - math.log(forward / spot) / years
    asked = {
        "model": model,
        "market": {"spot": spot, "rate": rate, "dividend_yield": dividend_yield},
        "slices": [{"expiry": years, "strikes": strikes, "payoff": "otm"}],
        "greeks": _GREEKS,
        "sensitivities": True,
    }
    answer = post("/v1/greeks", asked)
    (found,) = answer["slices"]
    greeks, told = found["greeks"], answer["definitions"]["greeks"]
    columns = zip(strikes, found["payoffs"], found["prices"], *(greeks[name] for name in _GREEKS), strict=True)
    forms = [_FORMS.get(name, ".2f") for name in _GREEKS]
    rows = [
        [f"{strike:g}", payoff, f"{price:.4f}", *(number(v, form) for v, form in zip(values, forms, strict=True))]
        for strike, payoff, price, *values in columns
    ]
    heads = ["strike", "payoff", "price", *(name.replace("minimum_variance_", "min. var. ") for name in _GREEKS)]
    middle = min(range(len(strikes)), key=lambda i: abs(strikes[i] - forward))
    slopes = [
        [name, number(column[middle], ".6g"), number(found["sensitivity_error_bounds"][name][middle], ".0e")]
        for name, column in found["sensitivities"].items()
    ]
    return "\n".join(
        [
            f"Expiry {named}, spot {spot:g}, rate {rate:.3%} and dividend yield {dividend_yield:.3%} as implied:\n",
            table(heads, rows),
            "\nUnits as the answer defines them:\n",
            table(["", "unit"], [[name, told[name]["unit"]] for name in _GREEKS]),
            f"\nDerivatives of the {found['payoffs'][middle]} at {strikes[middle]:g} by the parameters:\n",
            table(["parameter", "dV/d(parameter)", "error bound"], slopes),
        ]
    )
