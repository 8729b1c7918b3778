"""The engine's smile against the multiple-precision reference: relative errors, and whether the bounds cover them."""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import gmpy2
import numpy as np

from engine.smile import Slice, price_smiles
from engine.status import Payoff, Status
from tests.reference.mp_prices import NotReached, otm_digitals, otm_values

__all__ = ["FORWARD", "Quotes", "Verdict", "judge", "quotes"]

FORWARD = 100.0
FARTHEST = 600.0  # in ln(K/F): strikes stay doubles
LEAST = gmpy2.mpfr("1e-200")  # of the forward: above it the relative error is judged


@dataclass
class Verdict:
    """What was seen, over any number of smiles."""

    smiles: int = 0
    prices: int = 0
    unknown: int = 0  # prices for which the reference reached no verdict
    judged: int = 0  # prices above LEAST
    relative: float = 0.0  # worst relative error among them
    ratio: float = 0.0  # worst error / stated bound, over all prices
    missed: list[str] = field(default_factory=list)  # less accurate than asked, and the answer says so
    faults: list[str] = field(default_factory=list)

    def add(self, other: Verdict) -> None:
        """Take another verdict in."""
        self.smiles += other.smiles
        self.prices += other.prices
        self.unknown += other.unknown
        self.judged += other.judged
        self.relative = max(self.relative, other.relative)
        self.ratio = max(self.ratio, other.ratio)
        self.missed += other.missed
        self.faults += other.faults

    def __str__(self) -> str:
        return (
            f"{self.smiles} smiles, {self.prices} prices: worst error / stated bound {self.ratio:.3g}; worst relative "
            f"error {self.relative:.3g} over {self.judged} prices above 1e-200 of the forward; "
            f"{self.unknown} prices the reference could not tell; {len(self.missed)} less accurate than asked with a "
            f"status that says so; {len(self.faults)} faults"
        )


@dataclass(frozen=True)
class Quotes:
    """Strikes and payoffs of one smile, and what they are worth by the reference (FORWARD, no discounting)."""

    tau: float
    strikes: np.ndarray
    payoffs: np.ndarray
    exact: list[Any]


def quotes(
    model: Any, twin: Any, tau: float, distances: Sequence[float], *, digitals: bool = False, digits: int = 20
) -> Quotes:
    """Out-of-the-money quotes at ``distances`` in standard deviations from the forward, digital ones too on request.

    ``twin`` is the reference's model of the same parameters; it takes the strikes as the exact doubles they are.
    """
    spread = math.sqrt(float(np.reshape(model.mean_variance(tau), -1)[0]))
    strikes = FORWARD * np.exp(np.clip(spread * np.asarray(distances), -FARTHEST, FARTHEST))
    payoffs = np.full(strikes.shape, Payoff.OTM, dtype=np.uint8)
    exact = [_told(otm_values, twin, tau, strike, digits, FORWARD) for strike in strikes]
    if digitals:
        exact += [_told(otm_digitals, twin, tau, strike, digits, 1.0) for strike in strikes]
        binary = np.where(strikes >= FORWARD, Payoff.DIGITAL_CALL, Payoff.DIGITAL_PUT).astype(np.uint8)
        payoffs, strikes = np.concatenate([payoffs, binary]), np.concatenate([strikes, strikes])
    return Quotes(tau, strikes, payoffs, exact)


def _told(route: Any, twin: Any, tau: float, strike: float, digits: int, unit: float) -> Any:
    try:
        return unit * route(twin, tau, FORWARD, [strike], digits=digits)[0]
    except NotReached:
        return None


def judge(model: Any, asked: Quotes, *, tolerance: float, relative: float = math.inf) -> Verdict:
    """Price one smile and compare every number.

    A fault: an error above the stated bound; or above ``relative`` of a value larger than LEAST of the forward, under
    the status OK (under TOLERANCE_NOT_MET it counts as missed); or any exception or warning.
    """
    out = Verdict(smiles=1)
    one = Slice(asked.tau, FORWARD, 1.0, asked.strikes, asked.payoffs)
    try:
        with warnings.catch_warnings(action="error"):
            found = price_smiles(model, [one], tolerance=tolerance, implied_vols=False)[0]
    except (ArithmeticError, RuntimeWarning, LookupError, ValueError) as fault:  # counted like a wrong price
        where = f"tau={asked.tau!r} strikes={asked.strikes.tolist()} tolerance={tolerance!r}"
        out.faults.append(f"{model} {where}: {fault!r}")
        return out
    for i, true in enumerate(asked.exact):
        out.prices += 1
        if true is None:
            out.unknown += 1
            continue
        price, bound = float(found.prices[i]), float(found.error_bounds[i])
        with gmpy2.context(gmpy2.get_context(), precision=160):
            error = abs(gmpy2.mpfr(price) - true)
            ratio = float(error / gmpy2.mpfr(bound)) if bound > 0.0 else (0.0 if error == 0 else math.inf)
            worth = true > (LEAST * FORWARD if asked.payoffs[i] == Payoff.OTM else LEAST)
            share = float(error / true) if worth else 0.0
        out.judged += int(worth)
        out.relative, out.ratio = max(out.relative, share), max(out.ratio, ratio)
        if not ratio <= 1.0 or not share <= relative:
            told = ratio <= 1.0 and found.statuses[i] == Status.TOLERANCE_NOT_MET
            (out.missed if told else out.faults).append(
                f"{Payoff(found.payoffs[i]).word} {model} tau={asked.tau!r} strike={float(asked.strikes[i])!r} "
                f"forward={FORWARD} tolerance={tolerance!r}: {price!r} is off by {float(error):.3g}, stated bound "
                f"{bound:.3g} (ratio {ratio:.3g}), relative {share:.3g}; {found.transform}"
            )
    return out
