"""Answer of ``GET /v1/models``."""

from __future__ import annotations

from service.fields import Answer, described

__all__ = ["ModelAnswer", "ModelsAnswer", "ParameterAnswer"]


class ParameterAnswer(Answer):
    """One parameter of a model."""

    name: str = described(
        "Its name in requests; factors.0.rho is the rho of the first object in the array factors.",
        unit="none",
        example="rho",
    )
    description: str = described("What it is.", unit="none", example="Correlation of the underlying with its variance.")
    unit: str = described("Its unit.", unit="none", example="dimensionless")
    lower: float = described("Lower end of the admissible range.", unit="that of the parameter", example=-1.0)
    upper: float = described("Upper end of the admissible range.", unit="that of the parameter", example=1.0)
    lower_open: bool = described("Whether the lower end itself is excluded.", unit="none", example=True)
    upper_open: bool = described("Whether the upper end itself is excluded.", unit="none", example=True)
    allowed: str = described("The range in words.", unit="none", example="-1 < rho < 1")
    example: float = described("An ordinary value.", unit="that of the parameter", example=-0.5)


class ModelAnswer(Answer):
    """One model."""

    name: str = described("Its name in requests.", unit="none", example="heston")
    title: str = described("Its name in words.", unit="none", example="Heston stochastic volatility")
    source: str = described(
        "Where it was published.", unit="none", example="S. Heston, Review of Financial Studies 6(2), 1993"
    )
    parameters: list[ParameterAnswer] = described(
        "Its parameters, all of them required.",
        unit="none",
        example=[
            {
                "name": "rho",
                "description": "Correlation of the underlying with its variance.",
                "unit": "dimensionless",
                "lower": -1.0,
                "upper": 1.0,
                "lower_open": True,
                "upper_open": True,
                "allowed": "-1 < rho < 1",
                "example": -0.5,
            }
        ],
    )
    outputs: list[str] = described(
        "What can be asked for, as in outputs of /v1/smiles.",
        unit="none",
        example=["price", "implied_vol", "error_bound"],
    )
    greeks: list[str] = described(
        "Greeks it has, as in greeks of /v1/greeks.", unit="none", example=["delta", "gamma", "minimum_variance_delta"]
    )
    sensitivities: list[str] = described(
        "Parameters by which /v1/greeks gives derivatives.", unit="none", example=["v0", "kappa"]
    )
    payoffs: list[str] = described("Payoffs it prices.", unit="none", example=["call", "put", "otm"])


class ModelsAnswer(Answer):
    """Every model of this service."""

    models: list[ModelAnswer] = described(
        "The models.",
        unit="none",
        example=[
            {
                "name": "black",
                "title": "Black 1976 lognormal forward",
                "source": "F. Black, Journal of Financial Economics 3, 1976",
                "parameters": [
                    {
                        "name": "volatility",
                        "description": "Volatility (0.2 is 20 %).",
                        "unit": "per square root of a year",
                        "lower": 0.0,
                        "upper": 10.0,
                        "lower_open": False,
                        "upper_open": False,
                        "allowed": "0 <= volatility <= 10",
                        "example": 0.2,
                    }
                ],
                "outputs": ["price", "implied_vol", "error_bound"],
                "greeks": ["delta", "gamma", "theta", "rho", "vega"],
                "sensitivities": ["volatility"],
                "payoffs": ["call", "put", "otm", "digital_call", "digital_put"],
            }
        ],
    )
