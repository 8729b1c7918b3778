"""Request and answer of ``POST /v1/smiles``."""

from __future__ import annotations

from service.fields import Answer, described
from service.terms.pricing_schemas import EXAMPLE, PricingAsked, SmileAnswer
from service.terms.schemas import WarningAnswer

__all__ = ["EXAMPLE", "SmilesAnswer", "SmilesAsked"]


class SmilesAsked(PricingAsked):
    """Price slices under a model."""


class SmilesAnswer(Answer):
    """Slices in the order sent."""

    slices: list[SmileAnswer] = described(
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
                "implied_vols": [0.42448518175711086],
                "error_bounds": [1.4e-13],
                "transform": {"method": "contour_fft", "exponents": [0.5], "nodes": 56},
            }
        ],
    )
    warnings: list[WarningAnswer] = described(
        "Admissible values that look like slips of units; empty if there are none.",
        unit="none",
        example=[],
    )
