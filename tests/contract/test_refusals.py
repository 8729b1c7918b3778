"""Every documented refusal of a body: its status, its kind, the value pointed at, and the limit named."""

from __future__ import annotations

import json
import math
from typing import Any

import pytest

from tests.contract.contract import Contract
from tests.contract.requests import LEWIS, changed, lewis

PATH = "/v1/smiles"
JSON = {"Content-Type": "application/json"}
FIXED = {"expiry": 1.0, "forward": 100.0, "discount_factor": 0.99, "strikes": [100.0], "payoff": "call"}

# pointer, value put there, words of the detail
VALUES: list[tuple[str, Any, str]] = [
    ("/slices/0/strikes/2", math.nan, "finite"),
    ("/slices/0/strikes/2", math.inf, "finite"),
    ("/model/v0", -math.inf, "finite"),
    ("/market/spot", math.nan, "finite"),
    ("/slices/0/strikes/1", "100", "number, not a string"),
    ("/model/kappa", "4", "number, not a string"),
    ("/model/theta", True, "number, not a boolean"),
    ("/slices/0/strikes/0", None, "number, not null"),
    ("/slices/0/strikes/4", -100.0, "is -100.0; must be at least 1e-12"),
    ("/slices/0/strikes/3", 0.0, "must be at least 1e-12"),
    ("/slices/0/strikes", [], "is empty; at least 1"),
    ("/slices/0/strikes", 100.0, "array, not a number"),
    ("/slices", [], "is empty; at least 1"),
    ("/slices", {}, "array, not an object"),
    ("/slices/0/payoff", [], "is empty"),
    ("/slices/0/payoff", "straddle", "'call'"),
    ("/slices/0/payoff", ["call", "put"], "has 2 entries for 5 strikes"),
    ("/slices/0/expiry", 0.0, "is 0.0; must be at least 0.000114155"),
    ("/slices/0/expiry", -1.0, "must be at least"),
    ("/slices/0/expiry", 51.0, "must be at most 50"),
    ("/slices/0/expiry", True, "number"),
    ("/slices/0/expiry", "2027-02-30", "calendar date"),
    ("/slices/0/expiry", "tomorrow", "calendar date"),
    ("/model/rho", 1.0, "is 1.0; must be less than 1"),
    ("/model/rho", -1.0, "must be greater than -1"),
    ("/model/sigma", -0.1, "must be at least 0"),
    ("/model/sigma", 1e6, "must be at most"),
    ("/model/name", "hestom", "must be one of 'black', 'heston'"),
    ("/model", {"v0": 0.04}, "object"),
    ("/model/volatility", 0.2, "not a field"),
    ("/market/spot", 0.0, "must be at least"),
    ("/market/yield", 0.02, "not a field"),
    ("/market/rate", 11.0, "must be at most 10"),
    ("/slices/0/strike", 100.0, "not a field"),
    ("/method", "fft", "not a field"),
    ("/outputs", [], "is empty"),
    ("/outputs/0", "delta", "'price'"),
    ("/tolerance", 0.0, "must be at least 1e-14"),
    ("/tolerance", 0.5, "must be at most 0.01"),
    ("/day_count", "30/360", "'ACT/365F'"),
    ("/valuation_date", "16.03.2026", "calendar date"),
]


@pytest.mark.parametrize(("pointer", "value", "words"), VALUES, ids=[f"{p}={v}" for p, v, _ in VALUES])
def test_a_bad_value_is_pointed_at(contract: Contract, pointer: str, value: Any, words: str) -> None:
    body = changed(lewis(outputs=["price"]), pointer, value)
    refusal = contract.refused(PATH, content=json.dumps(body), headers=JSON)
    assert (refusal.status, refusal.kind) == (422, "invalid-request")
    if pointer == "/model":
        pointer = "/model/name"
        words = "required"
    assert list(refusal.faults) == [pointer]
    assert words in refusal.faults[pointer]
    assert pointer in refusal.detail


@pytest.mark.parametrize("sigma", [0.0])
def test_no_vol_of_vol_is_admitted(contract: Contract, sigma: float) -> None:
    """sigma = 0 with v0 = theta is Black's model: both answer the same price."""
    model = {"name": "heston", "v0": 0.04, "kappa": 1.0, "theta": 0.04, "sigma": sigma, "rho": -0.5}
    heston = contract.post(PATH, lewis(model=model))["slices"][0]
    black = contract.post(PATH, lewis(model={"name": "black", "volatility": 0.2}))["slices"][0]
    assert heston["prices"] == pytest.approx(black["prices"], rel=1e-10)


def test_all_faults_are_named_at_once(contract: Contract) -> None:
    body = lewis(surprise=1)
    body["slices"][0]["strikes"] = [80.0, -1.0, "x", 120.0, -3.0]
    del body["model"]["kappa"]
    refusal = contract.refused(PATH, body)
    assert set(refusal.faults) == {
        "/surprise",
        "/model/kappa",
        "/slices/0/strikes/1",
        "/slices/0/strikes/2",
        "/slices/0/strikes/4",
    }
    assert refusal.faults["/model/kappa"] == "is required"
    assert refusal.detail == "5 values are at fault."


def test_the_first_fifty_faults_of_many_are_listed(contract: Contract) -> None:
    refusal = contract.refused(PATH, changed(LEWIS, "/slices/0/strikes", [-1.0] * 2000))
    assert len(refusal.faults) == 50 and refusal.detail == "2000 values are at fault; the first 50 are listed."


def test_a_large_body_names_the_first_fault_of_each_column(contract: Contract) -> None:
    column = [100.0] * 9000 + [-1.0] * 9000
    slices = [{"expiry": 1.0, "strikes": column, "payoff": "call"}] * 2
    refusal = contract.refused(PATH, lewis(slices=slices))
    assert list(refusal.faults) == ["/slices/0/strikes/9000", "/slices/1/strikes/9000"]


@pytest.mark.parametrize(
    ("slices", "market", "pointers"),
    [
        ([{**FIXED, "forward": None}], None, ["/slices/0/forward"]),
        ([{k: v for k, v in FIXED.items() if k != "discount_factor"}], None, ["/slices/0/discount_factor"]),
        ([FIXED], LEWIS["market"], ["/slices/0/forward", "/slices/0/discount_factor"]),
        ([{**FIXED, "expiry": "2027-06-17"}], None, ["/valuation_date"]),
        (
            [{"expiry": 50.0, "strikes": [1.0], "payoff": "otm"}],
            {"spot": 1.0, "rate": 9.0, "dividend_yield": 0.0},
            ["/market"],
        ),
    ],
)
def test_terms_that_do_not_fit_together(
    contract: Contract, slices: list[Any], market: dict[str, float] | None, pointers: list[str]
) -> None:
    refusal = contract.refused(PATH, {"model": LEWIS["model"], "market": market, "slices": slices})
    assert (refusal.status, refusal.kind) == (422, "invalid-request")
    assert list(refusal.faults) == pointers


@pytest.mark.parametrize("expiry", ["2026-03-16", "2026-03-15", "2076-03-17"])
def test_a_date_out_of_range_is_pointed_at(contract: Contract, expiry: str) -> None:
    """The valuation date itself, the day before it, and more than fifty years after it."""
    body = changed(lewis(valuation_date="2026-03-16"), "/slices/0/expiry", expiry)
    refusal = contract.refused(PATH, body)
    assert list(refusal.faults) == ["/slices/0/expiry"]
    assert "years" in refusal.faults["/slices/0/expiry"]


@pytest.mark.parametrize(
    "content", [b"", b"{", b"{'a': 1}", b"\xff\xfe{}", b'{"a": 1} x', b"[" * 5000, b'{"a":' * 5000, b"nan"]
)
def test_what_is_not_json(contract: Contract, content: bytes) -> None:
    refusal = contract.refused(PATH, content=content, headers=JSON)
    assert (refusal.status, refusal.kind) == (400, "not-json")
    assert "line 1" in refusal.detail


@pytest.mark.parametrize("body", [[], 1, "x", None, [LEWIS]])
def test_json_that_is_no_object(contract: Contract, body: Any) -> None:
    refusal = contract.refused(PATH, content=json.dumps(body), headers=JSON)
    assert (refusal.status, refusal.kind) == (422, "invalid-request")
    assert "object" in refusal.faults[""]


@pytest.mark.parametrize("number", ["1e400", "-1e400", "1" + "0" * 400])
def test_numbers_beyond_doubles_are_not_finite(contract: Contract, number: str) -> None:
    content = '{"model": {"name": "black", "volatility": ' + number + '}, "slices": []}'
    refusal = contract.refused(PATH, content=content, headers=JSON)
    assert "finite" in refusal.faults["/model/volatility"]


@pytest.mark.parametrize(
    "headers",
    [
        {},
        {"Content-Type": "text/plain"},
        {"Content-Type": "application/x-www-form-urlencoded"},
        {"Content-Type": "application/json; charset=latin-1"},
        {"Content-Type": "application/json", "Content-Encoding": "gzip"},
    ],
)
def test_other_media_types(contract: Contract, headers: dict[str, str]) -> None:
    refusal = contract.refused(PATH, content=b"{}", headers=headers)
    assert (refusal.status, refusal.kind) == (415, "unsupported-media-type")


@pytest.mark.parametrize(
    "kind", ["application/json; charset=utf-8", "Application/JSON", 'application/json;charset="UTF-8"']
)
def test_spellings_of_json(contract: Contract, kind: str) -> None:
    answer = contract.client.post(PATH, content=json.dumps(LEWIS), headers={"Content-Type": kind})
    assert answer.status_code == 200


@pytest.mark.parametrize("accept", ["text/html", "application/json;q=0", "image/*, text/*"])
def test_an_accept_header_that_excludes_json(contract: Contract, accept: str) -> None:
    refusal = contract.refused(PATH, LEWIS, headers={"Accept": accept})
    assert (refusal.status, refusal.kind) == (406, "not-acceptable")


@pytest.mark.parametrize("accept", ["*/*", "text/html, application/json;q=0.1", "application/*", "text/html,*/*;q=0.8"])
def test_an_accept_header_that_admits_json(contract: Contract, accept: str) -> None:
    contract.post(PATH, LEWIS, headers={"Accept": accept})
