"""Pages for people: every address on them leads somewhere here, nothing is fetched from elsewhere."""

from __future__ import annotations

import html
import re

import httpx
import pytest

from tests.docs.markdown import request

PAGES = ["/", "/docs", "/problems", "/problems/invalid-request"]


@pytest.mark.parametrize("path", PAGES)
def test_every_address_on_a_page_is_here(client: httpx.Client, path: str) -> None:
    page = client.get(path)
    assert page.status_code == 200
    addresses = re.findall(r'(?:href|src)="([^"]+)"', page.text)
    assert addresses
    for address in addresses:
        assert address.startswith("/") and not address.startswith("//"), address
        assert client.get(address).status_code == 200, address


@pytest.mark.parametrize("path", PAGES)
def test_a_page_may_load_from_here_only(client: httpx.Client, path: str) -> None:
    policy = client.get(path).headers["Content-Security-Policy"]
    assert policy.startswith("default-src 'none'")
    assert not re.search(r"https?:|\*", policy)


def test_the_interactive_page_shows_the_document_served_here(client: httpx.Client) -> None:
    script = client.get("/assets/docs.js")
    assert script.headers["Content-Type"].startswith("text/javascript")
    assert re.findall(r'url: "([^"]+)"', script.text) == ["/openapi.json"]
    assert not re.search(r"https?://", script.text)
    bundle = client.get("/assets/swagger-ui-bundle.js")
    assert len(bundle.content) > 500_000 and bundle.headers["Content-Type"].startswith("text/javascript")


def test_an_unchanged_file_is_not_sent_again(client: httpx.Client) -> None:
    tag = client.get("/assets/page.css").headers["ETag"]
    again = client.get("/assets/page.css", headers={"If-None-Match": tag})
    assert (again.status_code, again.content) == (304, b"")


def test_the_first_request_on_the_start_page_works_as_printed(client: httpx.Client) -> None:
    page = client.get("/").text
    (command,) = re.findall(r"<pre><code>(curl.*?)</code></pre>", page, re.DOTALL)
    sent = request(html.unescape(command))
    assert sent.url == str(client.base_url.join("/v1/smiles"))
    answer = client.request(sent.method, sent.url, headers=sent.headers, content=sent.body)
    assert answer.status_code == 200 and len(answer.json()["slices"][0]["prices"]) == 5


def test_the_caution_is_on_the_start_page(client: httpx.Client) -> None:
    text = " ".join(re.sub(r"<[^>]+>", "", client.get("/").text).split())
    for words in ("model values", "not quotes, offers or advice", "validated independently", "model-risk policy"):
        assert words in text
