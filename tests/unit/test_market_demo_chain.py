"""The bundled demo chain: made by its maker, a request body of the contract, faulty on purpose, clean once cleaned."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np

import service.demo.make_chain as maker
from engine.market.chain import ChainExpiry
from engine.market.daycount import year_fraction
from engine.surface import build_surface

PATH = Path(maker.__file__).with_name("chain.json")
BODY = {"valuation_date", "day_count", "spot", "expiries"}
EXPIRY = {"expiry", "strikes", "call_bids", "call_asks", "put_bids", "put_asks"}


def _chain():
    body = json.loads(PATH.read_text(encoding="utf-8"))
    expiries = [
        ChainExpiry(
            year_fraction(body["valuation_date"], one["expiry"], day_count=body["day_count"]),
            *(
                np.array(one[name], dtype=float)
                for name in ("strikes", *sorted(EXPIRY - {"expiry", "strikes"}, key=_order))
            ),
        )
        for one in body["expiries"]
    ]
    return body, expiries


def _order(name):
    return ("call_bids", "call_asks", "put_bids", "put_asks").index(name)


def test_the_file_is_what_its_maker_makes():
    assert PATH.read_text(encoding="utf-8") == maker.chain_text()


def test_the_body_has_the_fields_of_the_contract_and_no_others():
    body, _ = _chain()
    assert set(body) == BODY
    assert len(body["expiries"]) == 8
    for one in body["expiries"]:
        assert set(one) == EXPIRY
        assert {len(one[name]) for name in EXPIRY - {"expiry"}} == {40}


def test_quotes_are_on_ticks():
    body, _ = _chain()
    numbers = [x for one in body["expiries"] for name in EXPIRY - {"expiry"} for x in one[name] if x is not None]
    assert all(abs(20.0 * x - round(20.0 * x)) < 1e-9 for x in numbers)


def test_every_kind_of_fault_shows_and_most_of_the_chain_survives():
    _, expiries = _chain()
    surface = build_surface(expiries)
    shown = {word for word, count in surface.totals.by_flag.items() if count}
    assert shown == set(surface.totals.by_flag) - {"no_ask"}
    assert surface.totals.quotes < 2 * 8 * 40  # some are missing
    assert surface.totals.expiries_without_forward == 0
    assert surface.totals.usable > 0.8 * 8 * 40
    assert surface.totals.pairs_used > 0.9 * surface.totals.pairs


def test_the_forwards_are_those_the_chain_was_made_from():
    """F = spot exp((rate - yield) tau), D = exp(-rate tau) of the maker's constants: within three standard errors, all
    sixteen, and within two for most (a normal law leaves 1 in 20 outside)."""
    body, expiries = _chain()
    scores = []
    for one in build_surface(expiries).expiries:
        forward = body["spot"] * math.exp((maker._RATE - maker._DIVIDEND_YIELD) * one.expiry)
        discount_factor = math.exp(-maker._RATE * one.expiry)
        scores.append((one.forward - forward) / one.forward_error)
        scores.append((one.discount_factor - discount_factor) / one.discount_factor_error)
    assert np.max(np.abs(scores)) < 3.0
    assert np.mean(np.abs(scores) < 2.0) > 0.8


def test_what_is_usable_makes_a_smile():
    """Bid, mid and ask volatilities in order, and all within what an index can have (common practice, no source)."""
    _, expiries = _chain()
    for one in build_surface(expiries).expiries:
        use = one.usable
        assert np.all(one.bid.vols[use] <= one.mid.vols[use]) and np.all(one.mid.vols[use] <= one.ask.vols[use])
        assert np.all((0.05 < one.mid.vols[use]) & (one.mid.vols[use] < 0.8))
