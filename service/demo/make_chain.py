"""Make ``chain.json``, the body the demo posts to ``/v1/chains``: ``python -m service.demo.make_chain``.

The underlying, the Quillmark 40 index, is invented, and so are its prices: Heston values by this engine on a made-up
forward curve, quoted in ticks by an invented market maker whose midpoints lean and whose spreads grow with the price.
Then the faults every real chain has are put in, so that the clean-up has something to show: missing quotes, crossed
ones, stale ones left over from another level of the index, and spreads blown wide.

The same seed gives the same chain. Every number is a multiple of a tick, far coarser than the engine's error bounds.
"""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any, Final, TypeAlias

import numpy as np
from numpy.typing import NDArray

from engine import MODELS, Payoff, Slice, price_smiles

__all__ = ["UNDERLYING", "chain_text", "make_chain"]

Column: TypeAlias = NDArray[np.float64]

UNDERLYING: Final = "Quillmark 40 (an invented index)"
_SPOT: Final = 4180.0
_RATE, _DIVIDEND_YIELD = 0.024, 0.013
_VALUATION: Final = date(2026, 3, 16)
_EXPIRIES: Final = (  # third Fridays
    date(2026, 4, 17),
    date(2026, 5, 15),
    date(2026, 6, 19),
    date(2026, 9, 18),
    date(2026, 12, 18),
    date(2027, 6, 18),
    date(2027, 12, 17),
    date(2028, 12, 15),
)
_STRIKES: Final = 40
_HESTON: Final = {"v0": 0.031, "kappa": 1.9, "theta": 0.044, "sigma": 0.62, "rho": -0.71}
_SEED: Final = 40


@dataclass(slots=True)
class _Side:
    """Bids and asks (n,) of the calls or the puts of one expiry, NaN where there is no quote."""

    bids: Column
    asks: Column


def make_chain() -> dict[str, Any]:
    """The request body: valuation date, spot, and per expiry 40 strikes with bids and asks, None where not quoted."""
    random = np.random.default_rng(_SEED)
    return {
        "valuation_date": _VALUATION.isoformat(),
        "day_count": "ACT/365F",
        "spot": _SPOT,
        "expiries": [_expiry(day, random) for day in _EXPIRIES],
    }


def chain_text() -> str:
    """The chain as the file holds it: one line a column, so that a difference is readable."""
    body = make_chain()
    expiries = [
        "  {" + ",\n   ".join(f"{json.dumps(name)}: {json.dumps(value)}" for name, value in one.items()) + "}"
        for one in body.pop("expiries")
    ]
    head = "".join(f" {json.dumps(name)}: {json.dumps(value)},\n" for name, value in body.items())
    return "{\n" + head + ' "expiries": [\n' + ",\n".join(expiries) + "\n ]\n}\n"


def _expiry(day: date, random: np.random.Generator) -> dict[str, Any]:
    years = (day - _VALUATION).days / 365.0
    strikes = _strikes(years)
    calls, puts = _quotes(years, strikes, _SPOT, random)
    stale_calls, stale_puts = _quotes(years, strikes, 0.972 * _SPOT, random)
    for side, stale in ((calls, stale_calls), (puts, stale_puts)):
        _spoil(side, stale, random)
    columns = {
        "call_bids": calls.bids,
        "call_asks": calls.asks,
        "put_bids": puts.bids,
        "put_asks": puts.asks,
    }
    return {
        "expiry": day.isoformat(),
        "strikes": strikes.tolist(),
        **{name: [None if math.isnan(x) else x for x in column.tolist()] for name, column in columns.items()},
    }


def _strikes(years: float) -> Column:
    """Forty round strikes, three below the money for two above, reaching as far as the expiry makes sensible."""
    reach = 5.5 * 0.2 * math.sqrt(years) * _SPOT
    step = min((10.0, 20.0, 25.0, 50.0, 100.0), key=lambda size: abs(size - reach / _STRIKES))
    lowest = step * round(_SPOT / step - 0.62 * _STRIKES)
    return np.asarray(lowest + step * np.arange(_STRIKES), dtype=np.float64)


def _quotes(years: float, strikes: Column, spot: float, random: np.random.Generator) -> tuple[_Side, _Side]:
    """Calls and puts as an orderly market maker quotes them: bids rounded down to the tick, asks up."""
    forward = spot * math.exp((_RATE - _DIVIDEND_YIELD) * years)
    discount = math.exp(-_RATE * years)
    payoffs = np.repeat(np.array([Payoff.CALL, Payoff.PUT], dtype=np.uint8), strikes.size)
    one = Slice(years, forward, discount, np.tile(strikes, 2), payoffs)
    (priced,) = price_smiles(MODELS["heston"](**_HESTON), [one], implied_vols=False)
    sides = [_quoted(prices, random) for prices in np.split(priced.prices, 2)]
    return sides[0], sides[1]


def _quoted(prices: Column, random: np.random.Generator) -> _Side:
    half = 0.1 + 0.006 * prices + 0.02 * np.sqrt(prices)
    lean = random.uniform(-0.4, 0.4, prices.size) * half
    tick = np.where(prices < 3.0, 0.05, np.where(prices < 60.0, 0.1, 0.5))
    bids = np.floor((prices + lean - half) / tick) * tick
    asks = np.ceil((prices + lean + half) / tick) * tick
    return _Side(np.maximum(np.round(bids, 2), 0.0), np.round(asks, 2))


def _spoil(side: _Side, stale: _Side, random: np.random.Generator) -> None:
    """Stale, crossed, wide and missing quotes, a few of each, at strikes drawn without repeats."""
    drawn = random.permutation(side.bids.size)
    for row in drawn[:1]:
        side.bids[row], side.asks[row] = stale.bids[row], stale.asks[row]
    for row in drawn[1:2]:
        side.bids[row], side.asks[row] = side.asks[row], side.bids[row]
    for row in drawn[2:3]:
        side.asks[row] = np.round(side.asks[row] + 6.0 * (side.asks[row] - side.bids[row]), 2)
    for row in drawn[3:5]:
        side.bids[row] = side.asks[row] = np.nan
    side.bids[drawn[5]] = np.nan


def _main() -> None:
    Path(__file__).with_name("chain.json").write_text(chain_text(), encoding="utf-8")


if __name__ == "__main__":
    _main()
