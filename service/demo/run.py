"""``smilewright demo``: the bundled chain through the whole job, over real HTTP, as a list of steps.

A step sends what it needs, adds to the story what later steps build on, and returns the text to print.
"""

from __future__ import annotations

import json
import tempfile
from collections.abc import Callable
from dataclasses import dataclass, field
from importlib import resources
from typing import Any, Final

import httpx

from service.demo.fit import FitError, fit_chain
from service.demo.greeks import show_greeks
from service.demo.make_chain import UNDERLYING
from service.demo.server import running_server
from service.demo.tables import number, table
from service.jobs.pool import running_workers
from service.jobs.store import wait_for_store
from service.settings import Settings

__all__ = ["DemoError", "run_demo"]

_PATIENCE: Final = 60.0  # seconds for the workers to make their store
_SHOWN: Final = 11  # strikes of a smile that are printed


class DemoError(Exception):
    """The demo did not come to its end; one sentence."""


@dataclass(slots=True)
class Story:
    """What the steps know: the client, the chain sent, and what came back so far."""

    client: httpx.Client
    chain: dict[str, Any]
    surface: dict[str, Any] = field(default_factory=dict)
    model: dict[str, Any] = field(default_factory=dict)
    smile: dict[str, Any] = field(default_factory=dict)

    def post(self, path: str, body: dict[str, Any]) -> dict[str, Any]:
        """The answer to a request, or DemoError."""
        answer = self.client.post(path, json=body)
        if answer.status_code != 200:
            raise DemoError(f"POST {path} was answered {answer.status_code}: {answer.json().get('detail', '')}")
        return dict(answer.json())


def run_demo() -> None:
    """Start a server, take every step, stop the server."""
    chain = json.loads(resources.files("service.demo").joinpath("chain.json").read_text(encoding="utf-8"))
    try:
        with tempfile.TemporaryDirectory(prefix="smilewright-") as folder:
            settings = Settings(access_log=False, log_level="error", data_dir=folder)
            with (
                running_workers(settings, settings.job_workers),
                running_server(settings) as base,
                httpx.Client(base_url=base, timeout=60.0) as client,
            ):
                print(f"A server runs at {base}; everything below went over HTTP.")
                if not wait_for_store(settings, seconds=_PATIENCE):
                    raise DemoError("the workers did not start")
                story = Story(client, chain)
                for number_, (title, step) in enumerate(_STEPS, 1):
                    print(f"\n{number_}. {title}\n", flush=True)
                    print(step(story), flush=True)
    except FitError as error:
        raise DemoError(str(error)) from error
    except (httpx.HTTPError, RuntimeError, OSError) as error:
        raise DemoError(f"the server could not be used: {error}") from error
    print("\nThese are model values of an invented market, not quotes or advice. smilewright serve keeps a server up.")


def _read_chain(story: Story) -> str:
    surface = story.surface = story.post("/v1/chains", story.chain)
    rows = [
        [
            sent["expiry"],
            number(one["forward"], ".2f"),
            number(one["forward_standard_error"], ".2f"),
            number(one["discount_factor"], ".5f"),
            number(one["discount_factor_standard_error"], ".5f"),
            f"{one['pairs_used']}/{one['pairs']}",
            str(sum(bool(flags) for side in one["flags"].values() for flags in side)),
            f"{sum(one['usable'])}/{len(one['usable'])}",
        ]
        for sent, one in zip(story.chain["expiries"], surface["expiries"], strict=True)
    ]
    heads = ["expiry", "forward", "+-", "discount", "+-", "pairs used", "flagged", "usable"]
    return f"{UNDERLYING}, spot {story.chain['spot']:g}, {story.chain['valuation_date']}\n\n{table(heads, rows)}"


def _count_flags(story: Story) -> str:
    totals = story.surface["totals"]
    rows = [[flag, str(count), _first(story, flag)] for flag, count in totals["by_flag"].items() if count]
    head = f"{totals['flagged']} of {totals['quotes']} quotes have a flag; {totals['usable']} strikes are usable."
    return f"{head}\n\n{table(['flag', 'quotes', 'the first one'], rows)}"


def _first(story: Story, flag: str) -> str:
    """Where a flag first stands, with the quote."""
    for sent, one in zip(story.chain["expiries"], story.surface["expiries"], strict=True):
        for side, name in (("calls", "call"), ("puts", "put")):
            for i, flags in enumerate(one["flags"][side]):
                if flag in flags:
                    bid, ask = (number(sent[f"{name}_{end}"][i], "g") for end in ("bids", "asks"))
                    return f"{sent['expiry']} {name} {sent['strikes'][i]:g}: {bid} / {ask}"
    return "-"


def _fit(story: Story) -> str:
    fit = fit_chain(story.client, story.chain, UNDERLYING)
    story.model = fit.model
    return fit.text


def _price_smile(story: Story) -> str:
    slices = [
        {
            "expiry": one["expiry"],
            "forward": one["forward"],
            "discount_factor": one["discount_factor"],
            "strikes": one["strikes"],
            "payoff": "otm",
        }
        for one in story.surface["expiries"]
    ]
    story.smile = story.post("/v1/smiles", {"model": story.model, "slices": slices})
    quoted, priced = story.surface["expiries"][3], story.smile["slices"][3]
    columns = zip(
        priced["strikes"],
        priced["payoffs"],
        *(quoted["implied_vols"][side] for side in ("bid", "mid", "ask")),
        priced["implied_vols"],
        priced["prices"],
        priced["error_bounds"],
        strict=True,
    )
    rows = [
        [f"{strike:g}", payoff, *(number(vol, ".2%") for vol in vols), f"{price:.6f}", f"{bound:.0e}"]
        for strike, payoff, *vols, price, bound in columns
    ]
    step = max(1, len(rows) // _SHOWN)
    heads = ["strike", "payoff", "bid vol", "mid vol", "ask vol", "model vol", "model price", "error bound"]
    parameters = ", ".join(f"{name} {value:.4g}" for name, value in list(story.model.items())[1:])
    count = sum(len(one["strikes"]) for one in slices)
    return (
        f"{count} strikes of {len(slices)} expiries in one request, Heston as fitted:\n{parameters}.\n"
        f"Expiry {story.chain['expiries'][3]['expiry']}, every {_ordinal(step)} strike, "
        f"{priced['transform']['nodes']} transform nodes:\n\n{table(heads, rows[::step])}"
    )


def _ordinal(n: int) -> str:
    return {1: "single", 2: "second", 3: "third", 4: "fourth"}.get(n, f"{n}th")


def _find_vols(story: Story) -> str:
    slices = [
        {
            **{name: one[name] for name in ("expiry", "forward", "discount_factor", "strikes", "prices")},
            "payoff": one["payoffs"],
        }
        for one in story.smile["slices"]
    ]
    found = story.post("/v1/implied-vols", {"slices": slices})
    rows = []
    for sent, priced, one in zip(story.chain["expiries"], story.smile["slices"], found["slices"], strict=True):
        pairs = [(a, b) for a, b in zip(priced["implied_vols"], one["implied_vols"], strict=True) if a and b]
        worst = max(abs(a - b) for a, b in pairs)
        rows.append([sent["expiry"], f"{one['statuses'].count('ok')}/{len(one['statuses'])}", f"{worst:.0e}"])
    heads = ["expiry", "volatilities found", "worst difference from the smile's own"]
    return f"The prices of the last step sent back:\n\n{table(heads, rows)}"


def _derive(story: Story) -> str:
    return show_greeks(
        story.post,
        spot=story.chain["spot"],
        expiry=story.surface["expiries"][3],
        named=story.chain["expiries"][3]["expiry"],
        model=story.model,
    )


_STEPS: Final[tuple[tuple[str, Callable[[Story], str]], ...]] = (
    ("Chain to forwards, discount factors and volatilities (POST /v1/chains)", _read_chain),
    ("What is wrong with which quote", _count_flags),
    ("A model fitted, as a job with progress (POST /v1/calibrations)", _fit),
    ("Smiles with prices, volatilities and error bounds (POST /v1/smiles)", _price_smile),
    ("Prices to volatilities (POST /v1/implied-vols)", _find_vols),
    ("Greeks and sensitivities with their definitions (POST /v1/greeks)", _derive),
)
