"""The report in a real browser, headless: wide and narrow, light and dark; it fetches nothing and fits the screen."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import threading
import zlib
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from importlib import resources
from pathlib import Path

import orjson
import pytest

from service.calibrations.job import KIND
from service.calibrations.report import surface_page
from service.calibrations.requests import CalibrationAsked
from service.demo.make_chain import UNDERLYING

pytestmark = pytest.mark.load
SCHEMES = {"dark": 0, "light": 1}
MEASURE = "<script>top.document.title = 'width ' + document.documentElement.scrollWidth + ' of ' + innerWidth</script>"
FRAME = '<!DOCTYPE html><title></title><iframe src="/measured" style="border:0;height:2000px;width:{width}px"></iframe>'


@pytest.fixture(scope="module")
def browser() -> str:
    """A headless browser, installed where that is possible."""
    if shutil.which("chromium") is None and os.geteuid() == 0 and shutil.which("apt-get"):
        environment = dict(os.environ, DEBIAN_FRONTEND="noninteractive")
        subprocess.run(["apt-get", "update", "-q"], check=False, capture_output=True)
        install = ["apt-get", "install", "-y", "-q", "--no-install-recommends", "chromium"]
        subprocess.run(install, check=False, capture_output=True, env=environment)
    found = shutil.which("chromium")
    if found is None:
        pytest.skip("there is no browser here, and it cannot be installed")
    return found


@pytest.fixture(scope="module")
def page() -> str:
    """The report of the demo's chain."""
    chain = orjson.loads(resources.files("service.demo").joinpath("chain.json").read_bytes())
    body = orjson.dumps({"model": "heston", "weights": "spread", "surfaces": [{"id": UNDERLYING, "chain": chain}]})
    surface = orjson.loads(KIND.open(body).compute(0, lambda: None))
    asked = CalibrationAsked.model_validate_json(body).model_dump(exclude={"surfaces"})
    return surface_page(surface, asked, job="0" * 32, when="16 March 2026, 08:00 UTC")


class Shown:
    """A server of one page that notes every request."""

    def __init__(self, text: str) -> None:
        requests: list[str] = []

        class Handler(BaseHTTPRequestHandler):
            def do_GET(self) -> None:
                requests.append(self.path)
                shown = text + MEASURE if self.path == "/measured" else text
                if self.path.startswith("/framed-"):
                    shown = FRAME.format(width=self.path.removeprefix("/framed-"))
                sent = shown.encode()
                self.send_response(200)
                self.send_header("Content-Type", "text/html; charset=utf-8")
                self.send_header("Content-Length", str(len(sent)))
                self.end_headers()
                self.wfile.write(sent)

            def log_message(self, *_: object) -> None:
                pass

        self.requests = requests
        self.server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
        self.base = f"http://127.0.0.1:{self.server.server_address[1]}"


@pytest.fixture
def shown(page: str) -> Iterator[Shown]:
    made = Shown(page)
    thread = threading.Thread(target=made.server.serve_forever)
    thread.start()
    yield made
    made.server.shutdown()
    thread.join()
    made.server.server_close()


def run(browser: str, *options: str) -> str:
    common = ("--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars", "--disable-background-networking")
    done = subprocess.run([browser, *common, *options], capture_output=True, text=True, check=False, timeout=180)
    assert done.returncode == 0, done.stderr[-500:]
    return done.stdout


def first_pixel(path: Path) -> str:
    """Colour of the corner of a PNG: whatever the filter of the first row, its first pixel stands there as it is."""
    data, chunks, at = path.read_bytes(), b"", 8
    while at < len(data):
        size, kind = int.from_bytes(data[at : at + 4], "big"), data[at + 4 : at + 8]
        chunks += data[at + 8 : at + 8 + size] if kind == b"IDAT" else b""
        at += 12 + size
    return "#" + zlib.decompress(chunks)[1:4].hex()


@pytest.mark.parametrize("width", [1280, 400])
@pytest.mark.parametrize("scheme", SCHEMES)
def test_it_loads_without_a_request_and_follows_the_scheme(
    browser: str, shown: Shown, page: str, tmp_path: Path, scheme: str, width: int
) -> None:
    picture = tmp_path / "page.png"
    run(
        browser,
        f"--blink-settings=preferredColorScheme={SCHEMES[scheme]}",
        f"--window-size={width},2400",
        f"--screenshot={picture}",
        f"{shown.base}/report",
    )
    assert shown.requests == ["/report"]
    light, dark, _print = re.findall(r"--paper: (#\w+);", page)
    assert first_pixel(picture) == {"light": light, "dark": dark}[scheme]


@pytest.mark.parametrize("width", [1280, 400])
def test_it_is_no_wider_than_the_screen(browser: str, shown: Shown, width: int) -> None:
    """In a frame of the width: a headless window itself is no narrower than 500."""
    text = run(browser, "--window-size=1400,2400", "--dump-dom", f"{shown.base}/framed-{width}")
    ((content, screen),) = re.findall(r"<title>width (\d+) of (\d+)</title>", text)
    assert int(content) <= int(screen) == width
