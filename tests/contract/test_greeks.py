"""``POST /v1/greeks``: published Greeks within their bounds, units, definitions, every model, refusals."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from copy import deepcopy
from fractions import Fraction
from typing import Any

import mpmath as mp
import pytest

from tests.contract.contract import Contract
from tests.contract.requests import LEWIS, changed, lewis

PATH, SMILES = "/v1/greeks", "/v1/smiles"
MODEL_GREEKS = ["delta", "gamma", "minimum_variance_delta", "theta", "rho"]
BLACK_GREEKS = ["vega", "vanna", "volga", "black_delta", "black_gamma"]
ALL = MODEL_GREEKS + BLACK_GREEKS

# Lewis's set ("Heston Model Reference Prices", 2019) and that of F. Fang and C. Oosterlee, SIAM J. Sci. Comput. 31(2),
# 2008 (inputs from memory), at K = 100, one year: 40-digit derivatives recomputed from the characteristic function,
# given to the digits shown; theta is -dC/dT.
PUBLISHED: dict[str, tuple[dict[str, Any], dict[str, str], dict[str, str]]] = {
    "Lewis": (
        LEWIS,
        {
            "delta": "0.599471325750028131",
            "gamma": "0.00928753738",
            "theta": "-9.43327631833392",
            "rho": "43.876977657974",
        },
        {
            "v0": "10.1792654044795",
            "kappa": "0.689854176691162",
            "theta": "32.5601334741097",
            "sigma": "-1.11317149821701",
            "rho": "0.949832739479237",
        },
    ),
    "Fang and Oosterlee": (
        {
            "model": {
                "name": "heston",
                "v0": 0.0175,
                "kappa": 1.5768,
                "theta": 0.0398,
                "sigma": 0.5751,
                "rho": -0.5711,
            },
            "market": {"spot": 100.0, "rate": 0.0, "dividend_yield": 0.0},
            "slices": [{"expiry": 1.0, "strikes": [100.0], "payoff": "call"}],
        },
        {
            "delta": "0.624916495626253",
            "gamma": "0.0305533418164",
            "theta": "-3.56076182472477",
            "rho": "56.7064941282491",
        },
        {
            "v0": "54.5653308932142",
            "kappa": "0.86874027056887",
            "theta": "62.9151829186584",
            "sigma": "-2.20480856321",
            "rho": "0.580572611416794",
        },
    ),
}
# Lewis's set: implied volatilities of his published prices, recomputed in 40 digits.
LEWIS_VOLS = {
    80.0: "0.446473997010266793",
    90.0: "0.434630124927447276",
    100.0: "0.424485181757110861",
    110.0: "0.415806150733152236",
    120.0: "0.40840587883232172",
}
# J. Hull, Options, Futures and Other Derivatives, and E. Haug, The Complete Guide to Option Pricing Formulas: the
# printed numbers from memory, the digits behind them recomputed in 40-digit arithmetic. Yields are rate less the
# cost of carry.
# source, spot, strike, years, rate, yield, volatility, payoff, {name: (printed, places printed, recomputed)}
BLACK_EXAMPLES: list[tuple[str, list[float], str, dict[str, tuple[float, int, str]]]] = [
    (
        "Hull",
        [49.0, 50.0, 0.3846, 0.05, 0.0, 0.20],
        "call",
        {
            "delta": (0.522, 3, "0.521601633971576"),
            "gamma": (0.066, 3, "0.0655453772524785"),
            "vega": (12.1, 1, "12.1052427542438"),
            "theta": (-4.31, 2, "-4.3053899645461"),
            "rho": (8.91, 2, "8.90657409880095"),
        },
    ),
    ("Haug", [105.0, 100.0, 0.5, 0.10, 0.10, 0.36], "call", {"delta": (0.5946, 4, "0.594628659729996")}),
    ("Haug", [105.0, 100.0, 0.5, 0.10, 0.10, 0.36], "put", {"delta": (-0.3566, 4, "-0.356600764770718")}),
    (
        "Haug",
        [55.0, 60.0, 0.75, 0.10, 0.0, 0.30],
        "call",
        {"gamma": (0.0278, 4, "0.0278211604769408"), "vega": (18.9358, 4, "18.9357773496179")},
    ),
    ("Haug", [430.0, 405.0, 0.0833, 0.07, 0.05, 0.20], "put", {"theta": (-31.1924, 4, "-31.1923670565190")}),
    ("Haug", [72.0, 75.0, 1.0, 0.09, 0.0, 0.19], "call", {"rho": (38.7325, 4, "38.7325050173291")}),
]


def _slice(answer: dict[str, Any]) -> dict[str, Any]:
    (found,) = answer["slices"]
    return dict(found)


def _unit(text: str) -> Fraction:
    """One unit of the last digit shown."""
    return Fraction(1, 10 ** len(text.partition(".")[2]))


@pytest.mark.parametrize("source", PUBLISHED)
def test_published_greeks_within_their_bounds(contract: Contract, source: str) -> None:
    body, greeks, slopes = PUBLISHED[source]
    found = _slice(contract.post(PATH, {**body, "greeks": list(greeks), "sensitivities": True}))
    at = found["strikes"].index(100.0)
    assert list(found["greeks"]) == list(greeks) and list(found["sensitivities"]) == list(slopes)
    for column, bounds, texts in (
        ("greeks", "greek_error_bounds", greeks),
        ("sensitivities", "sensitivity_error_bounds", slopes),
    ):
        for name, text in texts.items():
            value, bound = found[column][name][at], found[bounds][name][at]
            assert abs(Fraction(value) - Fraction(text)) <= Fraction(bound) + _unit(text), name
            assert bound <= 1e-9 * abs(value), name


def test_minimum_variance_delta_of_published_numbers(contract: Contract) -> None:
    """delta + (rho sigma / S) dV/dv0 of Lewis's set, from the numbers above: rho sigma / S = -0.005."""
    expected = mp.mpf("0.599471325750028131") - mp.mpf("0.005") * mp.mpf("10.1792654044795")
    found = _slice(contract.post(PATH, lewis(greeks=["minimum_variance_delta"])))
    assert found["greeks"]["minimum_variance_delta"][2] == pytest.approx(float(expected), rel=1e-13)


def test_black_quantities_at_published_volatilities(contract: Contract) -> None:
    """The textbook formulas in 30 digits at the volatilities of the published prices, derivatives by spot."""
    found = _slice(contract.post(PATH, lewis(greeks=BLACK_GREEKS)))
    for i, (strike, text) in enumerate(LEWIS_VOLS.items()):
        with mp.workdps(30):
            expected = _black(100, mp.mpf(strike), 1, mp.mpf("0.01"), mp.mpf("0.02"), mp.mpf(text))
        for name, value in expected.items():
            assert abs(found["greeks"][name][i] - float(value)) <= found["greek_error_bounds"][name][i] + 1e-15, name
            assert found["greek_error_bounds"][name][i] <= 1e-9 * abs(found["greeks"][name][i])


def _black(spot: Any, strike: Any, tau: Any, rate: Any, dividend: Any, vol: Any) -> dict[str, Any]:
    root, carry = vol * mp.sqrt(tau), mp.exp(-dividend * tau)
    d1 = (mp.log(spot / strike) + (rate - dividend + vol**2 / 2) * tau) / root
    d2, n = d1 - root, mp.npdf(d1)
    vega = spot * carry * n * mp.sqrt(tau)
    return {
        "vega": vega,
        "vanna": -carry * n * d2 / vol,
        "volga": vega * d1 * d2 / vol,
        "black_delta": carry * mp.ncdf(d1),
        "black_gamma": carry * n / (spot * root),
    }


@pytest.mark.parametrize(
    ("terms", "payoff", "texts"),
    [e[1:] for e in BLACK_EXAMPLES],
    ids=[f"{e[0]}-{'-'.join(e[3])}" for e in BLACK_EXAMPLES],
)
def test_textbook_greeks_in_the_units_stated(
    contract: Contract, terms: list[float], payoff: str, texts: dict[str, tuple[float, int, str]]
) -> None:
    """To the places printed and to the digits recomputed: theta per year, rho per 1.00 of rate, vega per 1.00."""
    spot, strike, years, rate, dividend, vol = terms
    body = {
        "model": {"name": "black", "volatility": vol},
        "market": {"spot": spot, "rate": rate, "dividend_yield": dividend},
        "slices": [{"expiry": years, "strikes": [strike], "payoff": payoff}],
        "greeks": list(texts),
    }
    answer = contract.post(PATH, body)
    found = _slice(answer)
    for name, (printed, places, text) in texts.items():
        value, bound = found["greeks"][name][0], found["greek_error_bounds"][name][0]
        assert abs(value - printed) <= 0.5001 * 10.0**-places
        assert abs(Fraction(value) - Fraction(text)) <= Fraction(bound) + _unit(text) + Fraction(1e-14 * abs(value))
    units = {name: said["unit"] for name, said in answer["definitions"]["greeks"].items()}
    expected = {
        "delta": "price per 1.00 of spot",
        "gamma": "price per 1.00 of spot squared",
        "vega": "price per 1.00 of volatility",
        "theta": "price per year",
        "rho": "price per 1.00 of the continuous rate",
    }
    assert units == {name: expected[name] for name in texts}


def test_the_delta_of_a_forward(contract: Contract) -> None:
    """E. Haug's delta of a futures option (from memory), by the forward since no spot is given."""
    body = {
        "model": {"name": "black", "volatility": 0.36},
        "slices": [
            {
                "expiry": 0.5,
                "forward": 105.0,
                "discount_factor": float(mp.exp(mp.mpf("-0.05"))),
                "strikes": [100.0, 100.0],
                "payoff": ["call", "put"],
            }
        ],
        "greeks": ["delta"],
    }
    answer = contract.post(PATH, body)
    found = _slice(answer)
    assert found["with_respect_to"] == "forward"
    assert found["greeks"]["delta"] == pytest.approx([0.594628659729996, -0.356600764770718], rel=1e-13)
    said = answer["definitions"]["greeks"]["delta"]
    assert "forward" in said["unit"] and "forward" in said["definition"] and "spot" not in said["definition"]


def test_every_number_returned_is_defined(contract: Contract) -> None:
    answer = contract.post(PATH, lewis(greeks=ALL, sensitivities=True))
    found = _slice(answer)
    assert found["with_respect_to"] == "spot" and found["greek_statuses"] == ["ok"] * 5
    for kind in ("greeks", "sensitivities"):
        assert list(answer["definitions"][kind]) == list(found[kind])
        for name, said in answer["definitions"][kind].items():
            assert said["unit"].startswith("price per "), name
            assert len(said["definition"]) > 20 and "{" not in said["definition"], name
    assert list(found["greeks"]) == ALL
    assert "theta" in found["greeks"] and "theta" in found["sensitivities"]  # two different things
    assert found["greeks"]["theta"] != found["sensitivities"]["theta"]


def test_what_is_not_asked_for_is_absent(contract: Contract) -> None:
    answer = contract.post(PATH, LEWIS)
    found = _slice(answer)
    assert list(found["greeks"]) == list(found["greek_error_bounds"]) == ["delta", "gamma"]
    assert "sensitivities" not in found and "sensitivities" not in answer["definitions"]
    bare = _slice(contract.post(PATH, lewis(outputs=["price"], greeks=[], sensitivities=True)))
    assert bare["greeks"] == {} and list(bare["sensitivities"]) == ["v0", "kappa", "theta", "sigma", "rho"]
    assert not {"implied_vols", "error_bounds", "greek_error_bounds", "sensitivity_error_bounds"} & bare.keys()


def test_prices_are_those_of_smiles(contract: Contract) -> None:
    """The same request priced by both, within their bounds."""
    smile, greeks = (_slice(contract.post(path, LEWIS)) for path in (SMILES, PATH))
    for a, b, x, y in zip(
        smile["prices"], greeks["prices"], smile["error_bounds"], greeks["error_bounds"], strict=True
    ):
        assert abs(a - b) <= x + y


def test_batch_equals_one_by_one(contract: Contract) -> None:
    """Slices of one request and the same slices alone, digitals among them, within the bounds of both."""
    slices = [
        {"expiry": expiry, "strikes": [60.0 + 7.0 * i for i in range(12)], "payoff": payoff}
        for expiry, payoff in ((0.05, "otm"), (0.5, "call"), (1.0, "put"), (3.0, "digital_call"), (20.0, "digital_put"))
    ]
    together = contract.post(PATH, lewis(slices=slices, greeks=ALL, sensitivities=True))["slices"]
    for one, found in zip(slices, together, strict=True):
        alone = _slice(contract.post(PATH, lewis(slices=[one], greeks=ALL, sensitivities=True)))
        for kind, bounds in (("greeks", "greek_error_bounds"), ("sensitivities", "sensitivity_error_bounds")):
            for name in alone[kind]:
                columns = (found[kind][name], alone[kind][name], found[bounds][name], alone[bounds][name])
                for a, b, x, y in zip(*columns, strict=True):
                    assert (a is None) == (b is None)
                    assert a is None or abs(a - b) <= x + y, (one, name)


def test_without_an_implied_volatility_black_quantities_are_null(contract: Contract) -> None:
    """Ten standard deviations and more above, where a price is below every double; the model's own Greeks stand."""
    body = {
        "model": {"name": "black", "volatility": 0.001},
        "slices": [
            {"expiry": 1.0, "forward": 100.0, "discount_factor": 1.0, "strikes": [100.0, 2000.0], "payoff": "call"}
        ],
        "greeks": ["delta", "vega"],
    }
    found = _slice(contract.post(PATH, body))
    assert found["greek_statuses"] == ["ok", "no_implied_vol"] and found["statuses"][1] != "ok"
    assert found["greeks"]["vega"][1] is None and found["greek_error_bounds"]["vega"][1] is None
    assert found["greeks"]["delta"][1] == 0.0 and found["greeks"]["vega"][0] > 0.0


def _models(contract: Contract) -> Iterator[tuple[dict[str, Any], dict[str, Any]]]:
    """Every model as the service describes it, with a ``model`` object of its examples."""
    for said in contract.client.get("/v1/models").json()["models"]:
        body: dict[str, Any] = {"name": said["name"]}
        for parameter in said["parameters"]:
            _put(body, parameter["name"], parameter["example"])
        yield said, body


def _put(body: dict[str, Any], name: str, value: float) -> None:
    if "." not in name:
        body[name] = value
        return
    array, place, inner = name.split(".")
    objects = body.setdefault(array, [])
    while len(objects) <= int(place):
        objects.append({})
    objects[int(place)][inner] = value


def test_every_model_answers_what_it_says(contract: Contract) -> None:
    """All of its Greeks and sensitivities for every payoff, with finite bounds; and refuses what it has not."""
    slices = [{"expiry": 0.5, "strikes": [80.0, 101.0, 125.0], "payoff": p} for p in ("otm", "digital_call")]
    names = set()
    for said, model in _models(contract):
        names.add(said["name"])
        assert said["outputs"] == ["price", "implied_vol", "error_bound"]
        body = lewis(model=model, slices=slices, greeks=said["greeks"], sensitivities=True)
        for found in contract.post(PATH, body)["slices"]:
            assert found["greek_statuses"] == ["ok"] * 3
            assert list(found["greeks"]) == said["greeks"]
            assert list(found["sensitivities"]) == said["sensitivities"] == [p["name"] for p in said["parameters"]]
            for columns in (found["greek_error_bounds"], found["sensitivity_error_bounds"]):
                assert all(bound is not None for column in columns.values() for bound in column)
        for greek in set(ALL) - set(said["greeks"]):
            refusal = contract.refused(PATH, {**body, "greeks": ["delta", greek]})
            assert list(refusal.faults) == ["/greeks/1"] and said["name"] in refusal.faults["/greeks/1"]
    assert names >= {"black", "heston", "bates", "merton", "variance_gamma", "double_heston", "kou"}


def test_each_number_is_the_derivative_its_definition_names(contract: Contract) -> None:
    """Central differences of the service's own prices, which have bounds of their own: 1e-5 apart, so that what the
    difference leaves out and what rounding adds are both near 1e-9. This holds conventions, not digits."""
    for _, model in _models(contract):
        body = lewis(model=model, slices=[{"expiry": 0.75, "strikes": [85.0, 100.0, 115.0], "payoff": "call"}])
        found = _slice(contract.post(PATH, {**body, "greeks": ["delta", "theta", "rho"], "sensitivities": True}))

        def difference(put: Callable[[dict[str, Any], float], None], h: float, body: Any = body) -> list[float]:
            columns = []
            for step in (h, -h):
                moved = deepcopy(body)
                put(moved, step)
                columns.append(_slice(contract.post(SMILES, {**moved, "tolerance": 1e-13}))["prices"])
            return [(up - down) / (2.0 * h) for up, down in zip(*columns, strict=True)]

        def near(column: list[float], by: list[float], scale: float, what: str, model: Any = model) -> None:
            for a, b in zip(column, by, strict=True):
                assert abs(a - b) <= 1e-6 * scale, (model["name"], what, a, b)

        near(found["greeks"]["delta"], difference(_step("market", "spot"), 1e-3), 1.0, "delta")
        near(found["greeks"]["rho"], difference(_step("market", "rate"), 1e-5), 100.0, "rho")
        slopes = difference(_step("slices", 0, "expiry"), 1e-5)
        near(found["greeks"]["theta"], [-slope for slope in slopes], 10.0, "theta")
        for name, column in found["sensitivities"].items():
            parts = [int(part) if part.isdigit() else part for part in name.split(".")]
            near(column, difference(_step("model", *parts), 1e-5), 100.0, name)


def _step(*path: str | int) -> Callable[[dict[str, Any], float], None]:
    def put(body: dict[str, Any], step: float) -> None:
        here: Any = body
        for part in path[:-1]:
            here = here[part]
        here[path[-1]] += step

    return put


@pytest.mark.parametrize(
    ("pointer", "value", "words"),
    [
        ("/greeks/0", "speed", "'minimum_variance_delta'"),
        ("/greeks/1", 1.0, "must be one of"),
        ("/greeks", "delta", "array, not a string"),
        ("/sensitivities", "yes", "true or false"),
        ("/sensitivity", True, "not a field"),
        ("/model/rho", -1.0, "must be greater than -1"),
        ("/tolerance", 1.0, "must be at most 0.01"),
    ],
)
def test_a_bad_value_is_pointed_at(contract: Contract, pointer: str, value: Any, words: str) -> None:
    refusal = contract.refused(PATH, changed(lewis(greeks=["delta", "gamma"]), pointer, value))
    assert (refusal.status, refusal.kind) == (422, "invalid-request")
    assert list(refusal.faults) == [pointer]
    assert words in refusal.faults[pointer]


def test_parameters_that_admit_no_forward(contract: Contract) -> None:
    """Variance Gamma with 1 - theta nu - sigma^2 nu / 2 <= 0 (Madan, Carr and Chang 1998): each value alone is fine."""
    model = {"name": "variance_gamma", "sigma": 1.0, "theta": 0.6, "nu": 1.0}
    for path in (PATH, SMILES):
        refusal = contract.refused(path, lewis(model=model))
        assert (refusal.status, refusal.kind) == (422, "invalid-request")
        assert list(refusal.faults) == ["/model/nu"]
        assert "no forward exists" in refusal.faults["/model/nu"] and "1e-06" in refusal.faults["/model/nu"]
    contract.post(PATH, lewis(model={**model, "nu": 0.5}))
