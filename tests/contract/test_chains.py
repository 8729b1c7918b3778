"""``POST /v1/chains``: forwards from parity, volatilities of the out-of-the-money side, flags per quote."""

from __future__ import annotations

import json
import math
from importlib import resources
from random import Random
from typing import Any

import pytest

from tests.contract import surface_2003
from tests.contract.contract import Contract
from tests.contract.requests import changed

PATH = "/v1/chains"
COLUMNS = ("call_bids", "call_asks", "put_bids", "put_asks")


def _black(payoff: str, forward: float, strike: float, discount: float, deviation: float) -> float:
    """Black (1976), written out with math.erfc."""
    d1 = math.log(forward / strike) / deviation + 0.5 * deviation
    sign = 1.0 if payoff == "call" else -1.0
    cdf = [0.5 * math.erfc(-sign * d / math.sqrt(2.0)) for d in (d1, d1 - deviation)]
    return discount * sign * (forward * cdf[0] - strike * cdf[1])


def _flat(forward: float = 100.0, discount: float = 0.95, *, half: float = 0.05, count: int = 11) -> dict[str, Any]:
    """An expiry of one year at 20 % volatility, quoted around Black's prices."""
    strikes = [forward * (0.8 + 0.4 * i / (count - 1)) for i in range(count)]
    expiry: dict[str, Any] = {"expiry": 1.0, "strikes": strikes}
    for payoff in ("call", "put"):
        prices = [_black(payoff, forward, strike, discount, 0.2) for strike in strikes]
        expiry[f"{payoff}_bids"] = [price - half for price in prices]
        expiry[f"{payoff}_asks"] = [price + half for price in prices]
    return expiry


def _one(contract: Contract, expiry: dict[str, Any], **members: Any) -> dict[str, Any]:
    (found,) = contract.post(PATH, {"expiries": [expiry], **members})["expiries"]
    return dict(found)


def test_a_chain_made_from_the_2003_index_surface_gives_its_forwards_back(contract: Contract) -> None:
    """Bids and asks around Black's prices at the published volatilities, midpoints off by up to a quarter spread."""
    random = Random(2003)
    expiries = []
    for tau, column in surface_2003.quotes().items():
        expiry: dict[str, Any] = {"expiry": tau, "strikes": [strike for strike, _ in column]}
        forward, discount = surface_2003.forward(tau), surface_2003.discount_factor(tau)
        for payoff in ("call", "put"):
            bids, asks = [], []
            for strike, vol in column:
                price = _black(payoff, forward, strike, discount, vol * math.sqrt(tau))
                half = 0.2 + 0.004 * price
                middle = price + half * random.uniform(-0.5, 0.5)
                bids.append(max(middle - half, 0.0))
                asks.append(middle + half)
            expiry |= {f"{payoff}_bids": bids, f"{payoff}_asks": asks}
        expiries.append(expiry)
    found = contract.post(PATH, {"spot": surface_2003.SPOT, "expiries": expiries})["expiries"]
    assert len(found) == len(expiries)
    for one in found:
        assert one["status"] == "fitted"
        tau = one["expiry"]
        forward, discount = surface_2003.forward(tau), surface_2003.discount_factor(tau)
        assert abs(one["forward"] - forward) <= 2.0 * one["forward_standard_error"] < 0.01 * forward
        assert abs(one["discount_factor"] - discount) <= 2.0 * one["discount_factor_standard_error"]
        assert one["rate"] == pytest.approx(-math.log(one["discount_factor"]) / tau, rel=1e-12)


def test_exact_quotes_give_exact_terms_and_vols(contract: Contract) -> None:
    """C - P = D (F - K) holds exactly in the midpoints, so the line goes through them to rounding."""
    found = _one(contract, _flat(), spot=98.0)
    assert found["forward"] == pytest.approx(100.0, rel=1e-12)
    assert found["discount_factor"] == pytest.approx(0.95, rel=1e-12)
    assert (found["pairs"], found["pairs_used"]) == (11, 11)
    assert found["rate"] == pytest.approx(-math.log(0.95), rel=1e-10)
    assert found["dividend_yield"] == pytest.approx(-math.log(0.95) - math.log(100.0 / 98.0), rel=1e-9)
    assert found["implied_vols"]["mid"] == pytest.approx([0.2] * 11, rel=1e-9)
    assert found["payoffs"][0] == "put" and found["payoffs"][-1] == "call"
    for bid, mid, ask in zip(*(found["implied_vols"][side] for side in ("bid", "mid", "ask")), strict=True):
        assert bid < mid < ask
    assert found["flags"] == {"calls": [[]] * 11, "puts": [[]] * 11} and all(found["usable"])
    assert found["warnings"] == []


@pytest.mark.parametrize(
    ("side", "row", "bid", "ask", "flag"),
    [
        ("call", 5, 8.0, 7.0, "crossed"),
        ("put", 5, None, 7.6, "no_bid"),
        ("put", 5, 0.0, 7.6, "no_bid"),
        ("put", 5, 7.5, None, "no_ask"),
        ("call", 0, 15.0, 16.0, "below_intrinsic"),  # D (F - K) = 19
        ("call", 3, 19.9, 20.0, "parity_outlier"),
        ("call", 8, 5.5, 5.6, "vertical_arbitrage"),
        ("put", 5, 7.9, 8.0, "butterfly_arbitrage"),
        ("put", 5, 1.0, 14.0, "wide"),
    ],
)
def test_each_fault_of_a_quote_is_flagged(
    contract: Contract, side: str, row: int, bid: float | None, ask: float | None, flag: str
) -> None:
    expiry = _flat()
    expiry[f"{side}_bids"][row], expiry[f"{side}_asks"][row] = bid, ask
    answer = contract.post(PATH, {"expiries": [expiry]})
    (found,) = answer["expiries"]
    assert flag in found["flags"][f"{side}s"][row]
    assert answer["totals"]["by_flag"][flag] >= 1
    assert found["forward"] == pytest.approx(100.0, abs=0.2)


def test_calendar_arbitrage_is_flagged(contract: Contract) -> None:
    """A later expiry that costs less than an earlier one at one strike over forward: Kahale (2004), from memory."""
    early, late = _flat(), {**_flat(half=0.05), "expiry": 2.0}
    for payoff in ("call", "put"):
        prices = [_black(payoff, 100.0, strike, 0.95, 0.1) for strike in late["strikes"]]
        late |= {f"{payoff}_bids": [p - 0.05 for p in prices], f"{payoff}_asks": [p + 0.05 for p in prices]}
    answer = contract.post(PATH, {"expiries": [early, late]})
    assert answer["totals"]["by_flag"]["calendar_arbitrage"] > 0


def test_given_terms_are_kept(contract: Contract) -> None:
    found = _one(contract, {**_flat(), "forward": 100.0, "discount_factor": 0.95})
    assert found["status"] == "given"
    assert (found["forward"], found["discount_factor"]) == (100.0, 0.95)
    assert found["forward_standard_error"] is None and found["discount_factor_standard_error"] is None


def test_an_empty_chain_has_statuses_and_no_numbers(contract: Contract) -> None:
    expiry = {"expiry": 1.0, "strikes": [90.0, 100.0], **dict.fromkeys(COLUMNS, [None, None])}
    found = _one(contract, expiry)
    assert found["status"] == "too_few_pairs" and found["forward"] is None and found["rate"] is None
    assert found["implied_vols"]["mid"] == [None, None]
    assert found["warnings"]


@pytest.mark.parametrize("expiry", [0.0, -1.0])
def test_an_expired_expiry_has_a_status(contract: Contract, expiry: float) -> None:
    found = _one(contract, {**_flat(), "expiry": expiry})
    assert found["status"] == "expired"
    assert set(found["statuses"]["mid"]) == {"expired"}


def test_the_bundled_chain(contract: Contract) -> None:
    """Eight expiries of forty strikes; crossed, stale and missing quotes show, and most of the rest is usable."""
    chain = json.loads(resources.files("service.demo").joinpath("chain.json").read_text(encoding="utf-8"))
    assert [len(one["strikes"]) for one in chain["expiries"]] == [40] * 8
    answer = contract.post(PATH, chain)
    assert all(one["status"] == "fitted" for one in answer["expiries"])
    totals = answer["totals"]
    for flag in ("crossed", "no_bid", "parity_outlier", "wide"):
        assert totals["by_flag"][flag] > 0
    assert totals["quotes"] < 2 * totals["strikes"] and totals["usable"] > 0.75 * totals["strikes"]


@pytest.mark.parametrize(
    ("pointer", "value", "words"),
    [
        ("/expiries", [], "is empty"),
        ("/expiries/0/put_asks", [1.0], "has 1 entries for 11 strikes"),
        ("/expiries/0/call_bids/3", "1.5", "number, not a string"),
        ("/expiries/0/strikes/3", -90.0, "must be at least"),
        ("/expiries/0/forward", 0.0, "must be at least"),
        ("/expiries/0/bids", [], "not a field"),
        ("/spot", -1.0, "must be at least"),
    ],
)
def test_a_bad_value_is_pointed_at(contract: Contract, pointer: str, value: Any, words: str) -> None:
    refusal = contract.refused(PATH, changed({"expiries": [_flat()]}, pointer, value))
    assert (refusal.status, refusal.kind) == (422, "invalid-request")
    assert list(refusal.faults) == [pointer] and words in refusal.faults[pointer]


def test_a_date_needs_a_valuation_date(contract: Contract) -> None:
    refusal = contract.refused(PATH, {"expiries": [{**_flat(), "expiry": "2027-06-17"}]})
    assert list(refusal.faults) == ["/valuation_date"]
