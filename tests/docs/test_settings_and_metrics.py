"""Every setting and every metric that a document names is one the service has."""

from __future__ import annotations

import asyncio
import re
from dataclasses import fields, is_dataclass

import httpx

from service.app import create_app
from service.settings import Settings
from tests.docs.markdown import DOCUMENTS

TEXT = "\n".join(path.read_text(encoding="utf-8") for path in DOCUMENTS)
PARTS_OF_A_METRIC = re.compile(r"_(?:bucket|count|sum|total|created)$")


def _setting_names() -> set[str]:
    names = {f.name for f in fields(Settings)} if is_dataclass(Settings) else set(Settings.model_fields)
    return {f"SMILEWRIGHT_{name.upper()}" for name in names}


def _metric_names() -> set[str]:
    async def scrape() -> str:
        app = create_app(Settings())
        async with (
            app.router.lifespan_context(app),
            httpx.AsyncClient(transport=httpx.ASGITransport(app=app)) as client,
        ):
            return (await client.get("http://127.0.0.1/metrics")).text

    return set(re.findall(r"^# TYPE (\w+) ", asyncio.run(scrape()), re.MULTILINE))


def test_settings_named_exist() -> None:
    assert set(re.findall(r"\bSMILEWRIGHT_[A-Z_]+\b", TEXT)) <= _setting_names()


def test_metrics_named_exist() -> None:
    known = {PARTS_OF_A_METRIC.sub("", name) for name in _metric_names()}
    assert known, "the service publishes no metric"
    assert {PARTS_OF_A_METRIC.sub("", name) for name in re.findall(r"\bsmilewright_[a-z_]+\b", TEXT)} <= known
