"""``POST /v1/smiles``: published prices, the terms of a slice in all their forms, and what is answered."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import pytest

from tests.contract.contract import Contract
from tests.contract.requests import LEWIS, PUBLISHED, changed, lewis

PATH = "/v1/smiles"


def _slice(answer: dict[str, Any]) -> dict[str, Any]:
    (found,) = answer["slices"]
    return dict(found)


@pytest.mark.parametrize("payoff", PUBLISHED)
def test_bounds_cover_the_difference_to_published_prices(contract: Contract, payoff: str) -> None:
    """Lewis (2019), calls and puts, compared in exact arithmetic."""
    found = _slice(contract.post(PATH, changed(LEWIS, "/slices/0/payoff", payoff)))
    for price, bound, text in zip(found["prices"], found["error_bounds"], PUBLISHED[payoff], strict=True):
        assert abs(Fraction(price) - Fraction(text)) <= Fraction(bound)
        assert bound <= 1e-9 * price


def test_black_prices_and_vols(contract: Contract) -> None:
    """J. Hull, Options, Futures and Other Derivatives, 5th ed., example 12.7: 4.76 and 0.81, to the digits printed."""
    body = {
        "model": {"name": "black", "volatility": 0.2},
        "market": {"spot": 42.0, "rate": 0.1, "dividend_yield": 0.0},
        "slices": [{"expiry": 0.5, "strikes": [40.0, 40.0], "payoff": ["call", "put"]}],
    }
    found = _slice(contract.post(PATH, body))
    assert [round(price, 2) for price in found["prices"]] == [4.76, 0.81]
    assert found["implied_vols"] == pytest.approx([0.2, 0.2], rel=1e-12)
    assert found["transform"] == {"method": "closed_form", "exponents": [], "nodes": 0}


def test_forward_and_discount_factor_stand_for_a_market(contract: Contract) -> None:
    """Definitions: F = S exp((r - q) tau), D = exp(-r tau)."""
    by_market = _slice(contract.post(PATH, LEWIS))
    assert by_market["forward"] == pytest.approx(100.0 * math.exp(-0.01), rel=1e-15)
    assert by_market["discount_factor"] == pytest.approx(math.exp(-0.01), rel=1e-15)
    terms = {name: by_market[name] for name in ("forward", "discount_factor")}
    body = {"model": LEWIS["model"], "slices": [{**LEWIS["slices"][0], **terms}]}
    assert _slice(contract.post(PATH, body)) == by_market


@pytest.mark.parametrize(
    ("day_count", "years"),
    # ACT/ACT: 291 days of 2026 (16 March to 1 January 2027) over 365, 167 days of 2027 over 365; no leap year.
    [("ACT/365F", 458 / 365), ("ACT/360", 458 / 360), ("ACT/ACT", 458 / 365)],
)
def test_dates_become_years(contract: Contract, day_count: str, years: float) -> None:
    """458 days lie between 16 March 2026 and 17 June 2027 (counted on a calendar)."""
    body = lewis(valuation_date="2026-03-16", day_count=day_count)
    found = _slice(contract.post(PATH, changed(body, "/slices/0/expiry", "2027-06-17")))
    assert found["expiry"] == pytest.approx(years, rel=1e-15)


def test_the_day_count_defaults_to_365_fixed(contract: Contract) -> None:
    body = changed(lewis(valuation_date="2026-03-16"), "/slices/0/expiry", "2028-03-15")
    assert _slice(contract.post(PATH, body))["expiry"] == 2.0  # 730 days, 29 February 2028 among them


def test_strikes_keep_their_order_and_repeats(contract: Contract) -> None:
    strikes = [120.0, 80.0, 100.0, 80.0, 110.0, 90.0]
    found = _slice(contract.post(PATH, changed(LEWIS, "/slices/0/strikes", strikes)))
    assert found["strikes"] == strikes
    assert found["prices"][1] == found["prices"][3]
    by_strike = dict(zip(strikes, found["prices"], strict=True))
    for strike, text in zip(LEWIS["slices"][0]["strikes"], PUBLISHED["call"], strict=True):
        assert by_strike[strike] == pytest.approx(float(text), rel=1e-11)


def test_payoffs_one_word_or_one_per_strike(contract: Contract) -> None:
    """otm is the call where strike >= forward, else the put; digitals pay one: call and put add up to D."""
    words = ["call", "put", "otm", "otm", "digital_call", "digital_put"]
    strikes = [100.0, 100.0, 80.0, 120.0, 100.0, 100.0]
    body = changed(changed(LEWIS, "/slices/0/strikes", strikes), "/slices/0/payoff", words)
    found = _slice(contract.post(PATH, body))
    assert found["payoffs"] == ["call", "put", "put", "call", "digital_call", "digital_put"]
    call, put, low, high, digital_call, digital_put = found["prices"]
    forward, discount = found["forward"], found["discount_factor"]
    assert call - put == pytest.approx(discount * (forward - 100.0), rel=1e-12)
    assert low == pytest.approx(float(PUBLISHED["put"][0]), rel=1e-11)
    assert high == pytest.approx(float(PUBLISHED["call"][4]), rel=1e-11)
    assert digital_call + digital_put == pytest.approx(discount, rel=1e-12)
    assert len({found["implied_vols"][i] for i in (0, 1, 4, 5)}) == 1


@pytest.mark.parametrize(
    ("outputs", "there"),
    [
        (["price"], {"prices"}),
        (["implied_vol"], {"implied_vols"}),
        (["error_bound", "price"], {"prices", "error_bounds"}),
    ],
)
def test_what_is_not_asked_for_is_absent(contract: Contract, outputs: list[str], there: set[str]) -> None:
    found = _slice(contract.post(PATH, lewis(outputs=outputs)))
    assert {"prices", "implied_vols", "error_bounds"} & found.keys() == there


def test_a_looser_tolerance_is_honoured(contract: Contract) -> None:
    """Bounds within the tolerance asked for, relative to the out-of-the-money value, and no more nodes than before."""
    body = changed(LEWIS, "/slices/0/payoff", "otm")
    tight = _slice(contract.post(PATH, {**body, "tolerance": 1e-12}))
    loose = _slice(contract.post(PATH, {**body, "tolerance": 1e-4}))
    for found, tolerance in ((tight, 1e-12), (loose, 1e-4)):
        for price, bound in zip(found["prices"], found["error_bounds"], strict=True):
            assert bound <= tolerance * price * (1.0 + 1e-6)
    assert loose["transform"]["nodes"] < tight["transform"]["nodes"]


def test_batch_equals_one_by_one(contract: Contract) -> None:
    """Slices of one request and the same slices alone, digitals among them, to the last bits that grids may move."""
    slices = [
        {"expiry": expiry, "strikes": [60.0 + 7.0 * i for i in range(12)], "payoff": payoff}
        for expiry, payoff in ((0.02, "otm"), (0.5, "call"), (1.0, "put"), (3.0, "digital_call"), (20.0, "otm"))
    ]
    together = contract.post(PATH, lewis(slices=slices))["slices"]
    for one, found in zip(slices, together, strict=True):
        alone = _slice(contract.post(PATH, lewis(slices=[one])))
        for name in ("prices", "implied_vols"):
            assert found[name] == pytest.approx(alone[name], rel=1e-9, abs=1e-300)
        for a, b, x, y in zip(
            found["prices"], alone["prices"], found["error_bounds"], alone["error_bounds"], strict=True
        ):
            assert abs(a - b) <= x + y
        assert found["statuses"] == alone["statuses"]


def test_slips_of_units_are_told_and_priced(contract: Contract) -> None:
    body = lewis(market={"spot": 100.0, "rate": 5.0, "dividend_yield": 0.02})
    warnings = {w["pointer"]: w["detail"] for w in contract.post(PATH, body)["warnings"]}
    assert "500" in warnings["/market/rate"] and "decimals" in warnings["/market/rate"]
    assert contract.post(PATH, LEWIS)["warnings"] == []
    far = contract.post(PATH, changed(LEWIS, "/slices/0/strikes", [1.0, 2.0]))["warnings"]
    assert [w["pointer"] for w in far] == ["/slices/0/strikes"]


def test_a_worthless_option_has_a_status_and_no_nan(contract: Contract) -> None:
    """exp(-k^2 / (2 s^2)) with k = ln 20, s = 0.001 is below every double (from memory: 1e-1900000)."""
    body = {
        "model": {"name": "black", "volatility": 0.001},
        "slices": [{"expiry": 1.0, "forward": 100.0, "discount_factor": 1.0, "strikes": [2000.0], "payoff": "call"}],
    }
    found = _slice(contract.post(PATH, body))
    assert found["prices"] == [0.0]
    assert found["implied_vols"] == [None] and found["statuses"] != ["ok"]
