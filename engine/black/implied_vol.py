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
from engine.black.inversion import BLOCK, normalised_deviation
from engine.errors import InputError
from engine.moneyness import log_moneyness
from engine.status import Payoff, Status

__all__ = ["ImpliedVols", "implied_vols"]

_NOISE = 2.0 * float(np.finfo(np.float64).eps)  # relative to the larger leg
_CALL, _PUT = np.uint8(Payoff.CALL), np.uint8(Payoff.PUT)
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
    strike = _above_zero("strikes", strikes, n)
    ahead = _above_zero("forward", forward, n)
    discount = _above_zero("discount_factor", discount_factor, n)
    years = vector("expiry", expiry, length=n)
    payoff = _payoffs(payoffs, n)
    out = ImpliedVols(np.empty(n), np.empty(n, dtype=np.uint8))
    with np.errstate(all="ignore"):
        for begin in range(0, n, BLOCK):
            part = slice(begin, begin + BLOCK)
            found = _volatilities(price[part], strike[part], ahead[part], discount[part], years[part], payoff[part])
            out.vols[part], out.statuses[part] = found.vols, found.statuses
    return out


def _above_zero(name: str, values: ArrayLike, n: int) -> Floats:
    column = vector(name, values, length=n)
    wrong = column <= 0.0
    if wrong.any():
        at = int(np.argmax(wrong))
        raise InputError(name, f"is {float(column[at])!r}", index=(at,), allowed="above 0")
    return column


def _payoffs(payoffs: ArrayLike, n: int) -> Bytes:
    codes = np.asarray(payoffs)
    if codes.dtype.kind not in "iuf":
        raise InputError("payoffs", "is not an array of payoff codes", allowed="codes of call, put or otm")
    if codes.ndim == 0:
        codes = np.full(n, codes)
    if codes.shape != (n,):
        raise InputError("payoffs", f"has shape {codes.shape}", allowed=f"one, or exactly {n}")
    wrong = (codes != Payoff.CALL) & (codes != Payoff.PUT) & (codes != Payoff.OTM)
    if wrong.any():
        at = int(np.argmax(wrong))
        raise InputError("payoffs", f"is {codes[at].item()!r}", index=(at,), allowed="codes of call, put or otm")
    return codes.astype(np.uint8, copy=False)


def _volatilities(
    price: Floats, strike: Floats, forward: Floats, discount: Floats, years: Floats, payoff: Bytes
) -> ImpliedVols:
    """One block. A NaN or an infinity in price, strike or forward makes ``a`` or ``c`` one; the rest is looked at."""
    value = _time_values(price, strike, forward, discount, payoff)
    value /= np.minimum(strike, forward) * discount
    found = normalised_deviation(np.abs(log_moneyness(strike, forward)), value)
    vols, statuses = found.deviations, found.statuses
    vols /= np.sqrt(years)
    expired = years <= 0.0
    if expired.any():
        statuses[expired & (statuses != Status.NOT_FINITE)] = Status.EXPIRED
        vols[expired] = np.nan
    infinite = ~(np.isfinite(years) & np.isfinite(discount))
    if infinite.any():
        statuses[infinite] = Status.NOT_FINITE
        vols[infinite] = np.nan
    return ImpliedVols(vols, statuses)


def _time_values(price: Floats, strike: Floats, forward: Floats, discount: Floats, payoff: Bytes) -> Floats:
    """Discounted out-of-the-money values; exactly 0 where what was left of a price in the money is its rounding."""
    gap = strike - forward
    in_money = np.flatnonzero(payoff == np.where(gap < 0.0, _CALL, _PUT))
    value = price.copy()
    if in_money.shape[0]:
        strike, forward, discount, gap = strike[in_money], forward[in_money], discount[in_money], gap[in_money]
        back = gap + forward  # two-sum: gap + gap_error is strike - forward exactly
        gap_error = (strike - back) - (forward - (back - gap))
        product = discount * gap
        product_error = _product_error(discount, gap, product) + discount * gap_error
        sign = np.sign(gap)
        left = (price[in_money] - sign * product) - sign * product_error
        left[np.abs(left) <= _NOISE * discount * np.maximum(strike, forward)] = 0.0
        value[in_money] = left
    return value


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
