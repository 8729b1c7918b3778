"""A thousand random requests made from the OpenAPI document: no 5xx, and no answer that breaks the document.

Three kinds: bodies that fit the schema, bodies that break it, and bodies that fit it and were made coherent across
their fields (columns of one length, terms of the market given once), which a schema cannot say and
which reach the engine.
"""

from __future__ import annotations

from collections import Counter
from typing import Any

import pytest
import schemathesis
from hypothesis import HealthCheck, Phase, given, settings
from schemathesis import GenerationMode
from schemathesis.checks import load_all_checks
from schemathesis.specs.openapi.checks import positive_data_acceptance

REQUESTS = {"price_smiles": 360, "compute_greeks": 300, "find_implied_vols": 210, "read_chain": 150}
MARKET = {"spot": 100.0, "rate": 0.03, "dividend_yield": 0.01}

load_all_checks()


@pytest.fixture(scope="module")
def schema(base: str) -> Any:
    return schemathesis.openapi.from_url(f"{base}/openapi.json")


@pytest.mark.parametrize("kind", ["fitting", "breaking", "coherent"])
@pytest.mark.parametrize("operation_id", REQUESTS)
def test_no_random_request_breaks_the_contract(schema: Any, operation_id: str, kind: str) -> None:
    operation = schema.find_operation_by_id(operation_id)
    mode = GenerationMode.NEGATIVE if kind == "breaking" else GenerationMode.POSITIVE
    wanted = REQUESTS[operation_id] // 3
    statuses: Counter[int] = Counter()

    @settings(
        max_examples=wanted,
        phases=[Phase.generate],
        derandomize=True,
        database=None,
        suppress_health_check=list(HealthCheck),
    )
    @given(case=operation.as_strategy(generation_mode=mode))
    def send(case: Any) -> None:
        if kind == "coherent":
            case.body = _coherent(case.body)
        # A schema cannot say that two fields belong together: a fitting body may be refused.
        answer = case.call_and_validate(excluded_checks=[positive_data_acceptance])
        statuses[answer.status_code] += 1

    send()
    print(operation_id, kind, dict(statuses))
    assert sum(statuses.values()) >= wanted
    assert statuses[200] > (wanted // 2 if kind == "coherent" else 0) or kind == "breaking"
    assert statuses[422] > 0 or kind == "coherent"


def _coherent(body: dict[str, Any]) -> dict[str, Any]:
    """The same body with columns cut to the shortest, and the market and the valuation date given."""
    name = "slices" if "slices" in body else "expiries"
    if name == "slices":
        body["market"] = body.get("market") or MARKET
    for one in body[name]:
        if name == "slices":
            one.pop("forward", None)
            one.pop("discount_factor", None)
        columns = [key for key, value in one.items() if isinstance(value, list)]
        least = min(len(one[key]) for key in columns)
        one.update({key: one[key][:least] for key in columns})
        if isinstance(one["expiry"], str):
            body["valuation_date"] = body.get("valuation_date") or "2026-03-16"
            one["expiry"] = f"{body['valuation_date'][:3]}9-12-31"
    return body
