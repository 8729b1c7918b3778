"""A real server on loopback for the whole session, a client of it, and its OpenAPI document."""

from __future__ import annotations

from collections.abc import Iterator

import httpx
import pytest

from service.demo.server import running_server
from service.settings import Settings
from tests.contract.contract import Contract


@pytest.fixture(scope="session")
def base(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """Address of a server with the default settings, but for a data folder of its own."""
    with running_server(Settings(data_dir=str(tmp_path_factory.mktemp("data")))) as address:
        yield address


@pytest.fixture(scope="session")
def client(base: str) -> Iterator[httpx.Client]:
    with httpx.Client(base_url=base, timeout=60.0) as made:
        yield made


@pytest.fixture(scope="session")
def contract(client: httpx.Client) -> Contract:
    return Contract(client, client.get("/openapi.json").json())
