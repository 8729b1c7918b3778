"""The README's first curl example, sent as printed, against the published prices printed beside it."""

from __future__ import annotations

import asyncio
import json
from fractions import Fraction

import httpx

from service.app import create_app
from service.settings import Settings
from tests.docs.markdown import Request, code, marked, request, rows


def _answer(sent: Request) -> dict[str, object]:
    """Send the request to the app itself, started and stopped as a server would, without a socket."""

    async def send() -> httpx.Response:
        app = create_app(Settings())
        async with (
            app.router.lifespan_context(app),
            httpx.AsyncClient(transport=httpx.ASGITransport(app=app)) as client,
        ):
            return await client.request(sent.method, sent.url, headers=sent.headers, content=sent.body)

    got = asyncio.run(send())
    assert got.status_code == 200, got.text
    return dict(got.json())


def test_bounds_cover_the_difference_to_the_published_prices() -> None:
    """Lewis (2019): in exact arithmetic, |price as returned - price as published| <= its own error bound."""
    sent = request(code(marked("first-example")))
    published = {Fraction(strike): Fraction(price) for strike, price in rows(marked("first-example-published"))}
    assert len(published) == 5
    (found,) = _answer(sent)["slices"]  # type: ignore[misc]
    assert [Fraction(k) for k in found["strikes"]] == list(published)
    for strike, price, bound in zip(found["strikes"], found["prices"], found["error_bounds"], strict=True):
        assert abs(Fraction(price) - published[Fraction(strike)]) <= Fraction(bound), strike
        assert bound < 1e-8 * price  # a bound that covers by being wide would say nothing


def test_the_example_asks_for_what_the_paper_prices() -> None:
    """The set of A. Lewis, "Heston Model Reference Prices": his theta is kappa here, his omega kappa * theta."""
    body = json.loads(request(code(marked("first-example"))).body)
    assert body["model"]["kappa"] * body["model"]["theta"] == 1.0
    assert body["model"]["kappa"] == 4.0
    assert (body["market"]["rate"], body["market"]["dividend_yield"]) == (0.01, 0.02)
