"""``POST /v1/implied-vols``: published prices and surfaces, a status for each price that has no volatility."""

from __future__ import annotations

import math
from typing import Any

import pytest

from tests.contract import surface_2003
from tests.contract.contract import Contract
from tests.contract.requests import PUBLISHED, changed

PATH = "/v1/implied-vols"
FLAT: dict[str, Any] = {"expiry": 1.0, "forward": 100.0, "discount_factor": 0.9, "strikes": [100.0], "payoff": "call"}


def _one(contract: Contract, **members: Any) -> dict[str, Any]:
    (found,) = contract.post(PATH, {"slices": [{**FLAT, **members}]})["slices"]
    return dict(found)


def test_published_vols(contract: Contract) -> None:
    """Lewis (2019) prices; volatilities recomputed from them in 40-digit arithmetic (mpmath)."""
    vols = [0.446473997010266793, 0.434630124927447276, 0.424485181757110861, 0.415806150733152236, 0.40840587883232172]
    for payoff, texts in PUBLISHED.items():
        body = {
            "market": {"spot": 100.0, "rate": 0.01, "dividend_yield": 0.02},
            "slices": [
                {
                    "expiry": 1.0,
                    "strikes": [80.0, 90.0, 100.0, 110.0, 120.0],
                    "payoff": payoff,
                    "prices": [float(text) for text in texts],
                }
            ],
        }
        (found,) = contract.post(PATH, body)["slices"]
        assert found["statuses"] == ["ok"] * 5
        assert found["implied_vols"] == pytest.approx(vols, rel=1e-14)


def test_at_the_money_by_the_exact_inverse(contract: Contract) -> None:
    """K = F: price = D F erf(s / sqrt(8)), an identity of Black's formula; s = 0.2 over one year."""
    price = 0.9 * 100.0 * math.erf(0.2 / math.sqrt(8.0))
    assert _one(contract, prices=[price])["implied_vols"] == pytest.approx([0.2], rel=1e-14)


@pytest.mark.parametrize(
    ("strike", "payoff", "price", "status"),
    [
        (80.0, "call", 17.0, "below_intrinsic"),  # D (F - K) = 18
        (80.0, "call", -1.0, "below_intrinsic"),
        (80.0, "call", 18.0, "zero_time_value"),
        (120.0, "call", 0.0, "zero_time_value"),
        (120.0, "call", 90.0, "above_maximum"),  # D F = 90
        (120.0, "put", 108.0, "above_maximum"),  # D K = 108
        (120.0, "put", 17.9, "below_intrinsic"),
        (80.0, "otm", -0.001, "below_intrinsic"),
        (100.0, "call", None, "not_finite"),
        (100.0, "call", 1e300, "above_maximum"),
        (120.0, "call", 1.0, "ok"),
    ],
)
def test_each_price_has_a_status(contract: Contract, strike: float, payoff: str, price: Any, status: str) -> None:
    found = _one(contract, strikes=[100.0, strike], payoff=["call", payoff], prices=[7.0, price])
    assert found["statuses"] == ["ok", status]
    assert (found["implied_vols"][1] is None) == (status != "ok")
    assert found["implied_vols"][0] == _one(contract, prices=[7.0])["implied_vols"][0]


@pytest.mark.parametrize("expiry", [0.0, -0.5])
def test_an_expired_slice_has_a_status(contract: Contract, expiry: float) -> None:
    found = _one(contract, expiry=expiry, prices=[7.0])
    assert (found["implied_vols"], found["statuses"]) == ([None], ["expired"])


def test_a_date_already_past_is_expired(contract: Contract) -> None:
    slices = [{**FLAT, "expiry": "2026-03-16", "prices": [7.0]}]
    (found,) = contract.post(PATH, {"valuation_date": "2026-03-16", "slices": slices})["slices"]
    assert found["statuses"] == ["expired"]


def test_otm_is_resolved(contract: Contract) -> None:
    found = _one(contract, strikes=[90.0, 100.0, 110.0], payoff="otm", prices=[1.0, 7.0, 1.0])
    assert found["payoffs"] == ["put", "call", "call"]


def test_the_2003_index_surface_to_prices_and_back(contract: Contract) -> None:
    """Volatilities to prices by the service's Black model, a slice a quote, and back to 1e-12."""
    quotes = [(tau, k, vol) for tau, column in surface_2003.quotes().items() for k, vol in column]
    market = {"spot": surface_2003.SPOT, "rate": surface_2003.RATE, "dividend_yield": 0.0}
    prices = []
    for tau, strike, vol in quotes:
        body = {
            "model": {"name": "black", "volatility": vol},
            "market": market,
            "slices": [{"expiry": tau, "strikes": [strike], "payoff": "call"}],
            "outputs": ["price"],
        }
        prices += contract.post("/v1/smiles", body)["slices"][0]["prices"]
    slices = [
        {"expiry": tau, "strikes": [k], "payoff": "call", "prices": [price]}
        for (tau, k, _), price in zip(quotes, prices, strict=True)
    ]
    found = contract.post(PATH, {"market": market, "slices": slices})["slices"]
    for (_, _, vol), one in zip(quotes, found, strict=True):
        assert one["statuses"] == ["ok"]
        assert abs(one["implied_vols"][0] - vol) <= 1e-12


@pytest.mark.parametrize(
    ("pointer", "value", "words"),
    [
        ("/slices/0/prices", [7.0, 8.0], "has 2 entries for 1 strikes"),
        ("/slices/0/prices/0", "7", "number, not a string"),
        ("/slices/0/payoff", "digital_call", "'call', 'put' or 'otm'"),
        ("/slices/0/discount_factor", -0.9, "must be at least"),
        ("/slices/0/strikes/0", -1.0, "must be at least"),
        ("/slices/0/expiry", 60.0, "must be at most 50"),
        ("/model", {"name": "black"}, "not a field"),
    ],
)
def test_a_bad_value_is_pointed_at(contract: Contract, pointer: str, value: Any, words: str) -> None:
    refusal = contract.refused(PATH, changed({"slices": [{**FLAT, "prices": [7.0]}]}, pointer, value))
    assert (refusal.status, refusal.kind) == (422, "invalid-request")
    assert list(refusal.faults) == [pointer] and words in refusal.faults[pointer]
