"""Black volatilities from market prices, one status a quote.

Problem. A price in the money is its intrinsic value plus the small time value that carries the volatility. With
``u = price / discount_factor`` the time value is ``u - |forward - strike|``, by put-call parity the undiscounted value
of the other payoff at that strike; taken naively it loses what the rounding of the products adds.

Trick. ``price - discount_factor |forward - strike|`` is taken exactly but for one rounding: the difference of forward
and strike and its product with the discount factor are carried as unevaluated sums of two doubles (Knuth's two-sum,
Veltkamp's and Dekker's two-product). What remains is the caller's own rounding, which no arithmetic can undo: whoever
computes an intrinsic value, in whatever order, rounds each discounted leg and their difference by half a unit each. A
time value within two units of the larger discounted leg is therefore indistinguishable from none and gets
``ZERO_TIME_VALUE``; only one below that is ``BELOW_INTRINSIC``. Out-of-the-money prices need no subtraction and are
taken as they are, down to the smallest normal double.

References: D. E. Knuth, "The Art of Computer Programming" 2, 4.2.2, theorem B; T. J. Dekker, Numerische Mathematik 18
(1971).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from engine.arrays import Bytes, Floats, vector
from engine.black.inversion import normalised_deviation
from engine.errors import InputError
from engine.moneyness import log_moneyness
from engine.status import Payoff, Status

__all__ = ["ImpliedVols", "implied_vols"]

_NOISE = 2.0 * float(np.finfo(np.float64).eps)  # relative to the larger leg
_SPLIT = 2.0**27 + 1.0  # Veltkamp's constant for 53 bits


@dataclass(frozen=True, slots=True)
class ImpliedVols:
    """``vols`` float64 (n,), NaN where ``statuses`` uint8 (n,) (codes of ``Status``) is not OK and says why."""

    vols: Floats
    statuses: Bytes


def implied_vols(
    prices: ArrayLike,
    *,
    strikes: ArrayLike,
    forward: ArrayLike,
    discount_factor: ArrayLike,
    expiry: ArrayLike,
    payoffs: ArrayLike,
) -> ImpliedVols:
    """Black volatilities of discounted prices, shape (n,); every other argument is (n,) or one number for all.

    ``strikes``, ``forward`` > 0 in the unit of the prices, ``discount_factor`` > 0, ``expiry`` in years, ``payoffs``
    codes of ``Payoff.CALL``, ``PUT`` or ``OTM``. Accuracy: within 16 units of rounding times the condition number.
    Statuses, the first that holds: NOT_FINITE (a NaN or an infinity among the arguments), EXPIRED (``expiry <= 0``),
    BELOW_INTRINSIC, ABOVE_MAXIMUM (at or over ``discount_factor`` times forward for a call, strike for a put),
    ZERO_TIME_VALUE, OK. Raises InputError for another length, a payoff without a volatility, and strikes, forwards or
    discount factors that are not above 0."""
    price = vector("prices", prices)
    n = price.shape[0]
    strike = vector("strikes", strikes, length=n)
    ahead = vector("forward", forward, length=n)
    discount = vector("discount_factor", discount_factor, length=n)
    years = vector("expiry", expiry, length=n)
    payoff = _payoffs(payoffs, n)
    for name, values in (("strikes", strike), ("forward", ahead), ("discount_factor", discount)):
        wrong = values <= 0.0
        if wrong.any():
            at = int(np.argmax(wrong))
            raise InputError(name, f"is {float(values[at])!r}", index=(at,), allowed="above 0")
    with np.errstate(all="ignore"):
        low = np.minimum(strike, ahead) * discount
        value, noise = _time_values(price, strike, ahead, discount, payoff)
        value[np.abs(value) <= noise] = 0.0
        found = normalised_deviation(np.abs(log_moneyness(strike, ahead)), value / low)
        vols = found.deviations / np.sqrt(years)
    statuses = found.statuses
    statuses[years <= 0.0] = Status.EXPIRED
    finite = [np.isfinite(values) for values in (price, strike, ahead, discount, years)]
    statuses[~np.logical_and.reduce(finite)] = Status.NOT_FINITE
    vols[statuses != Status.OK] = np.nan
    return ImpliedVols(vols, statuses)


def _payoffs(payoffs: ArrayLike, n: int) -> Bytes:
    codes = np.asarray(payoffs)
    if codes.ndim == 0:
        codes = np.full(n, codes)
    if codes.shape != (n,):
        raise InputError("payoffs", f"has shape {codes.shape}", allowed=f"one, or exactly {n}")
    wrong = ~np.isin(codes, (Payoff.CALL, Payoff.PUT, Payoff.OTM))
    if wrong.any():
        at = int(np.argmax(wrong))
        raise InputError("payoffs", f"is {codes[at].item()!r}", index=(at,), allowed="call, put or otm")
    return codes.astype(np.uint8)


def _time_values(
    price: Floats, strike: Floats, forward: Floats, discount: Floats, payoff: Bytes
) -> tuple[Floats, Floats]:
    """Discounted out-of-the-money values, and what of them is rounding (0 where nothing was subtracted)."""
    gap = strike - forward  # two-sum: gap + gap_error is strike - forward exactly
    back = gap + forward
    gap_error = (strike - back) - (forward - (back - gap))
    in_money = np.where(gap >= 0.0, payoff == Payoff.PUT, payoff == Payoff.CALL)
    if not in_money.any():
        return price.copy(), np.zeros(price.shape)
    sign = np.where(gap >= 0.0, 1.0, -1.0)
    product = discount * gap
    product_error = _product_error(discount, gap, product) + discount * gap_error
    value = (price - sign * product) - sign * product_error
    noise = _NOISE * discount * np.maximum(strike, forward)
    return np.where(in_money, value, price), np.where(in_money, noise, 0.0)


def _product_error(x: Floats, y: Floats, product: Floats) -> Floats:
    """``x y - product`` exactly (Dekker), and 0 where the splitting overflows (factors above 1e300)."""
    x_high, y_high = _upper(x), _upper(y)
    x_low, y_low = x - x_high, y - y_high
    error: Floats = ((x_high * y_high - product) + x_high * y_low + x_low * y_high) + x_low * y_low
    return np.where(np.isfinite(error), error, 0.0)


def _upper(x: Floats) -> Floats:
    """The upper 26 bits of ``x``."""
    scaled = _SPLIT * x
    return scaled - (scaled - x)
