"""Calibrations through HTTP alone: what comes back, what is refused, and the report."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from copy import deepcopy
from html.parser import HTMLParser
from typing import Any

import httpx
import pytest

from service.demo.server import running_server
from service.jobs.pool import running_workers
from service.settings import Settings
from tests.contract.contract import Contract
from tests.contract.requests import LEWIS, PUBLISHED, changed

PATH = "/v1/calibrations"
REPORT = PATH + "/{id}/report"
MARKET = {"spot": 100.0, "rate": 0.02, "dividend_yield": 0.01}
SMILE = {
    "market": MARKET,
    "slices": [
        {
            "expiry": 0.25,
            "strikes": [80.0, 90.0, 100.0, 110.0, 120.0],
            "implied_vols": [0.262, 0.231, 0.205, 0.186, 0.178],
            "bid_vols": [0.26, 0.229, 0.203, 0.184, 0.176],
            "ask_vols": [0.264, 0.233, 0.207, 0.188, 0.18],
        },
        {
            "expiry": 1.0,
            "strikes": [120.0, 80.0, 90.0, 100.0, 110.0],
            "implied_vols": [0.19, 0.25, 0.231, 0.214, 0.2],
            "bid_vols": [0.188, 0.248, 0.229, 0.212, 0.198],
            "ask_vols": [0.192, 0.252, 0.233, 0.216, 0.202],
        },
    ],
}
NOTHING = {"market": MARKET, "slices": [{"expiry": 1.0, "strikes": [90.0, 100.0], "implied_vols": [None, None]}]}
# Ten quotes do not tell eight or ten parameters apart: some are held, so that the fits are short.
HELD = {
    "bates": {"jump_intensity": 0.2, "jump_mean": -0.1, "jump_stdev": 0.1},
    "double_heston": {"factors.1.v0": 0.01, "factors.1.kappa": 0.5, "factors.1.theta": 0.01, "factors.1.sigma": 0.2},
}
BODY: dict[str, Any] = {"model": "heston", "surfaces": [{"id": "INDEX", "vols": SMILE}], "weights": "spread"}


@pytest.fixture(scope="module")
def jobs(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Contract]:
    """A server with a store of its own and one worker."""
    settings = Settings(data_dir=str(tmp_path_factory.mktemp("jobs")), access_log=False, max_surfaces=3)
    with running_workers(settings, 1), running_server(settings) as base:
        with httpx.Client(base_url=base, timeout=60.0) as client:
            while client.get(PATH).status_code == 503:  # until the worker has made the store
                pass
            yield Contract(client, client.get("/openapi.json").json())


def fitted(jobs: Contract, body: dict[str, Any]) -> dict[str, Any]:
    """A job that has succeeded."""
    answer = jobs.client.post(PATH, json=body, headers={"Prefer": "wait=30"})
    assert answer.status_code == 200, answer.text
    jobs.hold(answer, "post", PATH)
    job = dict(answer.json())
    assert job["status"] == "succeeded", job["problem"]
    return job


def surface(jobs: Contract, **members: Any) -> dict[str, Any]:
    """The result of the one surface of a request."""
    (found,) = fitted(jobs, {**BODY, **members})["result"]["surfaces"]
    return dict(found)


def test_a_flat_surface_has_one_volatility(jobs: Contract) -> None:
    """By Black's formula itself: the volatility of every option is the parameter."""
    flat = {"market": MARKET, "slices": [{"expiry": 0.5, "strikes": [90.0, 100.0, 120.0], "implied_vols": [0.2] * 3}]}
    found = surface(jobs, model="black", weights="uniform", surfaces=[{"id": "flat", "vols": flat}])
    assert found["status"] == "converged"
    assert found["parameters"] == {"volatility": pytest.approx(0.2, abs=1e-12)}
    assert found["rmse_vol"] < 1e-12 and found["feller_ratio"] is None and found["within_spread"] is None


def test_a_published_smile_is_fitted(jobs: Contract) -> None:
    """Lewis (2019): the published prices are those of a Heston set, so a fit with his mean reversion leaves nothing."""
    prices = [float(text) for text in PUBLISHED["call"]]
    asked = {**LEWIS["slices"][0], "prices": prices}
    vols = jobs.post("/v1/implied-vols", {"market": LEWIS["market"], "slices": [asked]})["slices"][0]["implied_vols"]
    slices = [{"expiry": 1.0, "strikes": asked["strikes"], "implied_vols": vols}]
    found = surface(
        jobs,
        weights="uniform",
        fixed={"kappa": LEWIS["model"]["kappa"], "sigma": LEWIS["model"]["sigma"]},
        surfaces=[{"id": "Lewis", "vols": {"market": LEWIS["market"], "slices": slices}}],
    )
    assert found["status"] == "converged" and found["rmse_vol"] < 1e-9
    for name in ("v0", "theta", "rho"):
        assert found["parameters"][name] == pytest.approx(LEWIS["model"][name], rel=1e-4), name
    assert found["standard_errors"]["kappa"] is None and found["correlation_order"] == ["v0", "theta", "rho"]


@pytest.mark.parametrize("model", ["black", "heston", "bates", "merton", "variance_gamma", "double_heston"])
def test_the_fitted_model_prices_as_the_result_says(jobs: Contract, model: str) -> None:
    """The same model sent to /v1/smiles: its volatilities are the result's; residuals are model less market."""
    found = surface(jobs, model=model, fixed=HELD.get(model, {}))
    assert [one["strikes"] for one in found["slices"]] == [one["strikes"] for one in SMILE["slices"]]
    slices = [{"expiry": one["expiry"], "strikes": one["strikes"], "payoff": "otm"} for one in found["slices"]]
    priced = jobs.post("/v1/smiles", {"model": found["model"], "market": MARKET, "slices": slices})["slices"]
    squares = []
    for sent, one, two in zip(SMILE["slices"], found["slices"], priced, strict=True):
        assert one["model_vols"] == pytest.approx(two["implied_vols"], abs=1e-9)
        assert one["market_vols"] == sent["implied_vols"] and all(one["used"])
        for gap, fit, market in zip(one["residual_vols"], one["model_vols"], one["market_vols"], strict=True):
            assert gap == pytest.approx(fit - market, abs=1e-12)
            squares.append(gap**2)
    assert found["rmse_vol"] == pytest.approx((sum(squares) / len(squares)) ** 0.5, rel=1e-6)
    inside = [
        low <= fit <= high
        for one in found["slices"]
        for low, fit, high in zip(one["bid_vols"], one["model_vols"], one["ask_vols"], strict=True)
    ]
    assert found["within_spread"] == pytest.approx(sum(inside) / len(inside))


def test_a_chain_goes_through_the_clean_up(jobs: Contract) -> None:
    """What is left out is what /v1/chains calls not usable, with the flags it has."""
    example = jobs.document["paths"]["/v1/chains"]["post"]["requestBody"]["content"]["application/json"]["example"]
    read = jobs.post("/v1/chains", example)["expiries"]
    found = surface(jobs, model="black", surfaces=[{"id": "chain", "chain": example}])
    wanted = {
        (one["expiry"], strike): set(one["flags"]["calls" if payoff == "call" else "puts"][i])
        for one in read
        for i, (strike, payoff, usable) in enumerate(zip(one["strikes"], one["payoffs"], one["usable"], strict=True))
        if not usable
    }
    assert wanted, "the example has a quote that cannot be used"
    assert {(one["expiry"], one["strike"]): set(one["flags"]) for one in found["left_out"]} == wanted
    (fit,) = found["slices"]
    assert fit["used"] == read[0]["usable"]
    assert fit["forward"] == pytest.approx(read[0]["forward"], rel=1e-12)


def test_one_surface_that_cannot_be_fitted_leaves_the_others(jobs: Contract) -> None:
    surfaces = [{"id": "empty", "vols": NOTHING}, {"id": "INDEX", "vols": SMILE}]
    empty, sound = fitted(jobs, {**BODY, "surfaces": surfaces})["result"]["surfaces"]
    assert (empty["status"], empty["parameters"], empty["slices"]) == ("refused", None, [])
    assert len(empty["warnings"]) == 1 and sound["status"] == "converged"
    assert {**sound, "id": ""} == {**surface(jobs), "id": ""}


def test_choices_do_what_they_say(jobs: Contract) -> None:
    free = surface(jobs)
    held = surface(jobs, fixed={"rho": -0.3}, bounds={"kappa": [3.0, 4.0]})
    assert held["parameters"]["rho"] == -0.3 and held["standard_errors"]["rho"] is None
    assert 3.0 <= held["parameters"]["kappa"] <= 4.0 and held["rmse_vol"] > free["rmse_vol"]
    assert surface(jobs, feller="require")["feller_ratio"] >= 1.0 - 1e-9
    pulled = surface(jobs, prior={"parameters": {"rho": -0.2}, "strength": 100.0})
    assert abs(pulled["parameters"]["rho"] + 0.2) < abs(free["parameters"]["rho"] + 0.2)
    assert surface(jobs, starts=3, seed=7) == surface(jobs, starts=3, seed=7)


FAULTS: list[tuple[str, Any, str, str]] = [
    ("/model", "sabr", "/model", "'black'"),
    ("/surfaces", [], "/surfaces", "is empty"),
    ("/surfaces/0/vols", None, "/surfaces/0", "chain or vols"),
    ("/surfaces/0/id", "", "/surfaces/0/id", "at least 1"),
    ("/surfaces/0/vols/slices/1/implied_vols", [0.2], "/surfaces/0/vols/slices/1/implied_vols", "1 entries for 5"),
    ("/surfaces/0/vols/slices/0/bid_vols", None, "/surfaces/0/vols/slices/0/bid_vols", "required"),
    ("/surfaces/0/vols/slices/0/implied_vols/2", -0.2, "/surfaces/0/vols/slices/0/implied_vols/2", "greater than 0"),
    ("/surfaces/0/vols/slices/0/forward", 100.0, "/surfaces/0/vols/slices/0/forward", "market too"),
    ("/surfaces/0/vols/slices/0/expiry", "2026-06-19", "/surfaces/0/vols/valuation_date", "is required"),
    ("/fixed", {"gamma": 1.0}, "/fixed/gamma", "v0, kappa, theta, sigma, rho"),
    ("/fixed", {"rho": -1.5}, "/fixed/rho", "allowed"),
    ("/start", {"kappa": "2"}, "/start/kappa", "number"),
    ("/bounds", {"kappa": [2.0, 1.0]}, "/bounds/kappa", "first must be below"),
    ("/bounds", {"kappa": [2.0]}, "/bounds/kappa", "1 entries"),
    ("/prior", {"parameters": {"nu": 1.0}, "strength": 1.0}, "/prior/parameters/nu", "no parameter of heston"),
    ("/prior", {"parameters": {}, "strength": -1.0}, "/prior/strength", "at least 0"),
    ("/starts", 0, "/starts", "at least 1"),
    ("/weights", "equal", "/weights", "'spread'"),
    ("/tolerance", 1e-8, "/tolerance", "not a field"),
]


@pytest.mark.parametrize(("pointer", "value", "at", "words"), FAULTS, ids=[f"{p}={v}" for p, v, _, _ in FAULTS])
def test_a_bad_request_is_refused_before_it_becomes_a_job(
    jobs: Contract, pointer: str, value: Any, at: str, words: str
) -> None:
    before = jobs.client.get(PATH).json()
    refusal = jobs.refused(PATH, changed(BODY, pointer, value))
    assert (refusal.status, refusal.kind) == (422, "invalid-request")
    assert words in refusal.faults[at]
    assert jobs.client.get(PATH).json() == before


def test_faults_of_every_surface_are_listed(jobs: Contract) -> None:
    body = deepcopy(BODY)
    body["surfaces"] = [{"id": "A", "vols": SMILE}, {"id": "A", "vols": SMILE}, {"id": "B"}]
    assert list(jobs.refused(PATH, body).faults) == ["/surfaces/1/id", "/surfaces/2"]


def test_too_many_surfaces_are_refused_with_the_limit(jobs: Contract) -> None:
    refusal = jobs.refused(PATH, {**BODY, "surfaces": [{"id": str(i), "vols": SMILE} for i in range(4)]})
    assert (refusal.status, refusal.kind) == (422, "limit-exceeded")
    assert "3 (setting SMILEWRIGHT_MAX_SURFACES)" in refusal.faults["/surfaces"]


class Page(HTMLParser):
    """What a page refers to, the plots it has, and the text it shows."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.targets: list[str] = []
        self.tags: list[str] = []
        self.plots: list[dict[str, str | None]] = []
        self.ids: set[str] = set()
        self.text = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        named = dict(attrs)
        self.tags.append(tag)
        self.targets += [v or "" for name, v in attrs if name in ("src", "href", "action", "xlink:href", "srcset")]
        self.ids.add(named.get("id") or "")
        if tag == "svg" and named.get("aria-hidden") != "true":
            self.plots.append(named)

    def handle_data(self, data: str) -> None:
        self.text += data


def report(jobs: Contract, job: dict[str, Any], **query: str) -> tuple[httpx.Response, Page]:
    answer = jobs.client.get(job["links"]["report"], params=query)
    assert answer.status_code == 200, answer.text
    jobs.hold(answer, "get", REPORT)
    return answer, Page(answer.text)


def test_the_report_needs_nothing_but_itself(jobs: Contract) -> None:
    """No script, no address that a browser would fetch, and a policy that forbids both."""
    answer, page = report(jobs, fitted(jobs, BODY))
    assert set(page.tags).isdisjoint({"script", "img", "iframe", "object", "embed", "form", "base"})
    assert page.targets == ["data:,"]
    assert re.findall(r"url\(|@import|https?://", answer.text) == []
    assert answer.headers["Content-Security-Policy"].startswith("default-src 'none'")
    assert "prefers-color-scheme: dark" in answer.text and "@media print" in answer.text


def test_the_report_shows_the_fit(jobs: Contract) -> None:
    job = fitted(jobs, BODY)
    found = job["result"]["surfaces"][0]
    _, page = report(jobs, job)
    assert len(page.plots) == 3  # two expiries and the term structure
    for plot in page.plots:  # a name and a text for those who do not see the plot
        assert plot["role"] == "img" and set((plot["aria-labelledby"] or "").split()) <= page.ids
    for name, value in found["parameters"].items():
        assert name in page.text and f"{value:.6g}" in page.text
    for words in (job["id"], "INDEX", "Correlation", "Left out", "not quotes, offers or advice", "spread"):
        assert words in page.text
    for warning in found["warnings"]:
        assert warning in page.text


def test_of_many_surfaces_each_has_its_report(jobs: Contract) -> None:
    names = ["INDEX", 'A & B <b>"x"</b>', "empty"]
    surfaces = [{"id": name, "vols": NOTHING if name == "empty" else SMILE} for name in names]
    job = fitted(jobs, {**BODY, "surfaces": surfaces})
    answer, page = report(jobs, job)
    assert all(name in page.text for name in names) and "b" not in page.tags
    for target in [one for one in page.targets if one != "data:,"]:
        assert jobs.client.get(f"{job['links']['report']}{target}").status_code == 200
    _, one = report(jobs, job, surface=names[1])
    assert names[1] in one.text and "b" not in one.tags
    _, none = report(jobs, job, surface="empty")
    assert "no fit" in none.text and none.plots == []
    refusal = jobs.problem(jobs.client.get(job["links"]["report"], params={"surface": "Z"}), "get", REPORT)
    assert (refusal.status, refusal.kind) == (404, "no-such-surface")


def test_a_job_without_a_result_has_no_report(jobs: Contract) -> None:
    surfaces = [{"id": str(i), "vols": SMILE} for i in range(3)]
    job = jobs.client.post(PATH, json={**BODY, "surfaces": surfaces, "starts": 100}).json()
    early = jobs.problem(jobs.client.get(job["links"]["report"]), "get", REPORT)
    assert (early.status, early.kind) == (409, "not-finished") and "Retry-After" in early.answer.headers
    assert jobs.client.delete(job["links"]["self"]).json()["status"] == "cancelled"
    late = jobs.problem(jobs.client.get(job["links"]["report"]), "get", REPORT)
    assert (late.status, late.kind) == (409, "not-finished") and "Retry-After" not in late.answer.headers
    unknown = jobs.problem(jobs.client.get(f"{PATH}/x/report"), "get", REPORT)
    assert (unknown.status, unknown.kind) == (404, "no-such-job")


def test_the_example_of_the_document_is_fitted(jobs: Contract) -> None:
    example = jobs.document["paths"][PATH]["post"]["requestBody"]["content"]["application/json"]["example"]
    found = fitted(jobs, json.loads(json.dumps(example)))["result"]["surfaces"][0]
    assert found["status"] == "converged" and found["within_spread"] == 1.0
