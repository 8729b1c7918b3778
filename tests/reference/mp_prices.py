"""Reference prices in multiple precision, independent of the engine.

The problem: the out-of-the-money value per unit forward, to 20 digits and more *of itself*, however small it is.

With ``M(w) = E[exp(w X)]``, ``X = ln(S_T/F)``, ``k = ln(K/F)`` and a contour that crosses the real axis at ``p`` and
runs to infinity in the upper and, mirrored, in the lower half plane,

    value(k) = 1/(2 pi i) int M(w) exp(-(w - 1) k) / (w (w - 1)) dw    (call for p > 1, put for p < 0)

(Lewis 2000, "Option Valuation under Stochastic Volatility", ch. 2, from memory). ``p`` is the minimiser of the
integrand on the real axis, so that the integral loses only a digit or two against its own size (Lord and Kahl 2007).
The contour is the hyperbola ``w = c + i b sinh(y - i omega)`` (Boyarchenko and Levendorskii 2019), and the rule in
``y`` is the plain trapezoidal one, whose error falls like ``exp(-2 pi d / h)``. The step is halved until two successive
sums agree to a little more than half the digits asked for: halving squares the error, so the finer sum then has them
all with some to spare. If they never agree, ``NotReached`` is raised. An integral that Markov's inequality puts below
``exp(-NEGLIGIBLE)``, far under the double range, counts as zero.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import gmpy2
from gmpy2 import mpc, mpfr

__all__ = [
    "NotReached",
    "digital",
    "log_moments",
    "log_strike",
    "moment_strip",
    "otm_digitals",
    "otm_value",
    "otm_values",
    "sensitivity",
]

NEGLIGIBLE = 1000
EDGE_BITS = 30  # of the distance from 0 or 1: a contour keeps well away from the edges
HALVINGS = 9
NODES = 60_000


class NotReached(ArithmeticError):
    """The reference could not verify the digits asked for."""


@dataclass(frozen=True)
class _Payoff:
    """The kernel beside ``M(w)``: its poles and ``exp(-(w - shift) k)``."""

    poles: tuple[int, ...]
    shift: int

    def divisor(self, w: Any) -> Any:
        return w * (w - 1) if len(self.poles) == 2 else w


VANILLA = _Payoff((0, 1), 1)
DIGITAL = _Payoff((0,), 0)


def log_strike(strike: Any, forward: Any) -> Any:
    """``ln(K/F)`` of two doubles taken as exact, in the precision of the current context."""
    return gmpy2.log(mpfr(strike) / mpfr(forward))


def _bits(model: Any, tau: Any, digits: int) -> int:
    extra = model.extra_digits(tau) if hasattr(model, "extra_digits") else 0
    return math.ceil((digits + 14 + extra) * math.log2(10))


def _precise(bits: int) -> Any:
    return gmpy2.context(gmpy2.get_context(), precision=bits)


def otm_values(model: Any, tau: float, forward: float, strikes: Sequence[float], *, digits: int = 20) -> list[Any]:
    """Undiscounted out-of-the-money value per unit forward: a call where ``strike >= forward``, else a put.

    ``digits`` are relative to each value and verified; the arguments are exact doubles (or mpfr). Raises NotReached.
    """
    with _precise(_bits(model, tau, digits)):
        logs = [log_strike(strike, forward) for strike in strikes]
        if hasattr(model, "mixture"):
            return [_mixed(model, tau, k, VANILLA, k >= 0, digits) for k in logs]
        at = model.prepare(tau)
        edges = at.edges(bits=EDGE_BITS)
        return [_vanilla(at, edges, k, k >= 0, digits) for k in logs]


def otm_digitals(model: Any, tau: float, forward: float, strikes: Sequence[float], *, digits: int = 20) -> list[Any]:
    """Undiscounted probability of the out-of-the-money side: above where ``strike >= forward``, else below."""
    with _precise(_bits(model, tau, digits)):
        logs = [log_strike(strike, forward) for strike in strikes]
        if hasattr(model, "mixture"):
            return [_mixed(model, tau, k, DIGITAL, k >= 0, digits) for k in logs]
        at = model.prepare(tau)
        edges = at.edges(bits=EDGE_BITS)
        return [_digital(at, edges, k, k >= 0, digits) for k in logs]


def otm_value(model: Any, tau: Any, k: Any, *, digits: int = 20, lean: float = 1.0) -> Any:
    """The same at one log strike ``k``: a call where ``k >= 0``, else a put.

    ``lean`` bends the contour from straight (0) to the angle of fastest decay (1): another route to the same number.
    """
    with _precise(_bits(model, tau, digits)):
        at = model.prepare(tau)
        return _vanilla(at, at.edges(bits=EDGE_BITS), mpfr(k), k >= 0, digits, lean)


def _vanilla(at: Any, edges: tuple[Any, Any], k: Any, call: bool, digits: int, lean: float = 1.0) -> Any:
    narrow = mpfr("1e-3")
    if call and edges[1] - 1 > narrow:
        return _contour_integral(at, (mpfr(1), edges[1]), k, VANILLA, digits, lean=lean)
    if not call and -edges[0] > narrow:
        return _contour_integral(at, (edges[0], mpfr(0)), k, VANILLA, digits, lean=lean)
    # A strip that ends on the pole means a value near its upper bound: go between the poles, add the residue.
    residue = mpfr(1) if call else gmpy2.exp(k)
    return _contour_integral(at, (mpfr(0), mpfr(1)), k, VANILLA, digits, residue=residue, lean=lean)


def digital(model: Any, tau: Any, k: Any, *, above: bool, digits: int = 20) -> Any:
    """``P(X > k)`` or, with ``above=False``, ``P(X < k)``, undiscounted, to relative digits."""
    with _precise(_bits(model, tau, digits)):
        at = model.prepare(tau)
        return _digital(at, at.edges(bits=EDGE_BITS), mpfr(k), above, digits)


def _digital(at: Any, edges: tuple[Any, Any], k: Any, above: bool, digits: int) -> Any:
    if above:
        return _contour_integral(at, (mpfr(0), edges[1]), k, DIGITAL, digits)
    if -edges[0] > mpfr("1e-3"):
        return -_contour_integral(at, (edges[0], mpfr(0)), k, DIGITAL, digits)
    return 1 - _contour_integral(at, (mpfr(0), edges[1]), k, DIGITAL, digits)


def _mixed(model: Any, tau: Any, k: Any, payoff: _Payoff, call: bool, digits: int) -> Any:
    """A mixture of lognormals, summed until five terms in a row no longer matter or have no weight left."""
    count, total, quiet = mpfr(model.jump_intensity) * mpfr(tau), mpfr(0), 0
    for n, (weight, log_forward, variance) in enumerate(model.mixture(tau)):
        term = weight * _lognormal(log_forward, variance, k, payoff, 1 if call else -1)
        total += term
        idle = term <= total * mpfr(10) ** -(digits + 5) if total > 0 else weight < mpfr("1e-600")
        quiet = quiet + 1 if n > count and idle else 0
        if quiet == 5:
            return total


def _lognormal(log_forward: Any, variance: Any, k: Any, payoff: _Payoff, sign: int) -> Any:
    """Black (1976) by the complementary error function; the digits lost far out are there to lose."""
    distance = log_forward - k
    if variance == 0:
        inside = sign * distance > 0
        worth = abs(gmpy2.exp(log_forward) - gmpy2.exp(k)) if payoff is VANILLA else mpfr(1)
        return worth if inside else mpfr(0)
    root = gmpy2.sqrt(2 * variance)
    below = gmpy2.erfc(-sign * (distance - variance / 2) / root) / 2
    if payoff is DIGITAL:
        return below
    above = gmpy2.erfc(-sign * (distance + variance / 2) / root) / 2
    return sign * (gmpy2.exp(log_forward) * above - gmpy2.exp(k) * below)


def moment_strip(model: Any, tau: float, *, digits: int = 30) -> tuple[Any, Any]:
    """The open interval of finite moments."""
    with _precise(_bits(model, tau, digits)):
        return model.prepare(tau).edges()


def log_moments(model: Any, tau: Any, p: Any, heights: Sequence[float], *, digits: int = 25) -> list[Any]:
    """``log M(p + i u)`` at increasing ``u >= 0``, continued from the real axis.

    From each height to the next the number of steps is doubled until it no longer matters, twice in a row.
    """
    with _precise(_bits(model, tau, digits)):
        at = model.prepare(tau)
        p = mpfr(p)
        value, state = at.log_moment(mpc(p), None)
        below, out = mpfr(0), []
        for u in heights:
            if u > 0:
                value, state = _climb(at, p, below, mpfr(u), state)
                below = mpfr(u)
            out.append(value)
        return out


def _climb(at: Any, p: Any, below: Any, above: Any, state: Any) -> tuple[Any, Any]:
    last, agreed, steps = None, 0, 2
    while agreed < 2:
        near = state
        for j in range(1, steps + 1):
            value, near = at.log_moment(mpc(p, below + (above - below) * j / steps), near)
        agreed = agreed + 1 if last is not None and abs(value - last) < mpfr("1e-20") * (1 + abs(value)) else 0
        last = value
        steps *= 2
        if steps > NODES:
            raise NotReached("the path of the logarithm does not settle")
    return last, near


def sensitivity(price: Callable[[Any], Any], at: Any, *, digits: int = 25, step: str = "1e-10", order: int = 1) -> Any:
    """First or second derivative by central differences, one Richardson step; ``price`` must carry ``3 digits / 2``."""
    with _precise(math.ceil((2 * digits + 20) * math.log2(10))):
        x = mpfr(at)
        h = mpfr(step) * max(abs(x), mpfr("1e-3"))

        def difference(width: Any) -> Any:
            up, down = price(x + width), price(x - width)
            if order == 1:
                return (up - down) / (2 * width)
            return (up - 2 * price(x) + down) / width**2

        return (4 * difference(h) - difference(2 * h)) / 3


# --- the contour ------------------------------------------------------------------------------------------------------


def _exponent(at: Any, p: Any, k: Any, payoff: _Payoff) -> Any:
    value = at.log_moment(mpc(p), None)[0].real - (p - payoff.shift) * k
    return value - gmpy2.log(abs(payoff.divisor(p)))


def _place(interval: tuple[Any, Any], x: float) -> Any:
    """The real line onto the interval, logarithmically toward both ends."""
    low, high = interval
    if math.isinf(float(high)):
        return low + gmpy2.exp(mpfr(x))
    if math.isinf(float(low)):
        return high - gmpy2.exp(mpfr(x))
    return low + (high - low) / (1 + gmpy2.exp(mpfr(-x)))


def _saddle(at: Any, interval: tuple[Any, Any], k: Any, payoff: _Payoff) -> Any:
    """Golden section for the minimiser on the real axis, to one per cent of its distance from the nearer end.

    Where the moments leave even this number range on both test points, the minimiser is on the side of the pole.
    """
    ratio = (math.sqrt(5) - 1) / 2
    low, high = -45.0, 45.0

    def height(x: float) -> Any:
        value = _exponent(at, _place(interval, x), k, payoff)
        return mpfr("inf") if gmpy2.is_nan(value) else value

    a, b = high - ratio * (high - low), low + ratio * (high - low)
    fa, fb = height(a), height(b)
    while high - low > 0.02:
        if fa < fb or (gmpy2.is_infinite(fa) and gmpy2.is_infinite(fb) and interval[0] >= 0):
            high, b, fb = b, a, fa
            a = high - ratio * (high - low)
            fa = height(a)
        else:
            low, a, fa = a, b, fb
            b = low + ratio * (high - low)
            fb = height(b)
    return _place(interval, (low + high) / 2)


def _angles(at: Any, p: Any, k: Any) -> tuple[float, float]:
    """Middle angle of the contour's arms and the half width of the sector around it."""
    low, high = at.sector(p)
    slope = at.slope()
    if slope is None:
        return (low + high) / 2, (high - low) / 2
    pull = slope - k
    if pull == 0:
        return (low + high) / 2, (high - low) / 2
    best = math.pi - math.atan2(float(pull.imag / abs(pull)), float(pull.real / abs(pull)))
    low, high = max(low, best - math.pi / 2), min(high, best + math.pi / 2)
    return (low + high) / 2, (high - low) / 2


def _contour_integral(
    at: Any, interval: tuple[Any, Any], k: Any, payoff: _Payoff, digits: int, *, residue: Any = None, lean: float = 1.0
) -> Any:
    if residue is None:
        residue = mpfr(0)
    p = _saddle(at, interval, k, payoff)
    if at.log_moment(mpc(p), None)[0].real - (p - payoff.shift) * k < -NEGLIGIBLE:
        return residue
    low, high = at.sector(p)
    trials = [_angles(at, p, k)]
    if lean != 1.0:
        trials = [(math.pi / 2 + lean * (trials[0][0] - math.pi / 2), trials[0][1] / 2)]
    elif getattr(at, "mixed", False):  # parts of unlike scales: what pulls far out need not be what pulls before that
        trials += [((low + high) / 2, (high - low) / 2)]
        trials += [
            ((low + math.pi / 2) / 2, (math.pi / 2 - low) / 2),
            ((high + math.pi / 2) / 2, (high - math.pi / 2) / 2),
        ]
    paths = [(_path(at, interval, p, angle, 0.9 * half, k, payoff), 0.9 * half) for angle, half in trials]
    if len(paths) > 1:
        peaks = [path.peak() for path, _ in paths]
        tame = [i for i, peak in enumerate(peaks) if peak <= 1000 * min(peaks)]
        paths = [paths[tame[0]]]
    path, half = paths[0]
    return path.integrate(2 * math.pi * half / (math.log(10) * 0.6 * digits), residue, digits)


def _path(at: Any, interval: tuple[Any, Any], p: Any, angle: float, half: float, k: Any, payoff: _Payoff) -> _Hyperbola:
    """The hyperbola through ``p`` with arms at ``angle``, as wide as the interval and the integrand's bend allow."""
    omega = math.pi / 2 - angle
    room = min(p - interval[0], interval[1] - p)
    step = room / 16
    bend = _exponent(at, p + step, k, payoff) + _exponent(at, p - step, k, payoff) - 2 * _exponent(at, p, k, payoff)
    width = step / gmpy2.sqrt(abs(bend)) if bend != 0 else room
    right = math.sin(omega + half) - math.sin(omega) if omega + half < math.pi / 2 else 1 - math.sin(omega)
    left = math.sin(omega) - math.sin(omega - half) if omega - half > -math.pi / 2 else 1 + math.sin(omega)
    scale = min(0.8 * (interval[1] - p) / right, 0.8 * (p - interval[0]) / left, 4 * width)
    return _Hyperbola(at, p, mpfr(scale), mpfr(omega), k, payoff)


class _Hyperbola:
    """``w(y) = c + i b sinh(y - i omega)`` through ``p`` at ``y = 0``; terms of the trapezoidal rule for ``y >= 0``."""

    def __init__(self, at: Any, p: Any, scale: Any, omega: Any, k: Any, payoff: _Payoff) -> None:
        self.at, self.p, self.scale, self.k, self.payoff = at, p, scale, k, payoff
        self.turn = mpc(gmpy2.cos(omega), -gmpy2.sin(omega))
        self.centre = p - scale * gmpy2.sin(omega)
        self.half = mpc(0, scale / 2)
        self.top, self.state = at.log_moment(mpc(p), None)
        self.pause = 4 if getattr(at, "mixed", False) else 1  # jumps of nearly one size let the integrand come back

    def term(self, y: Any, near: Any) -> tuple[Any, Any]:
        grow = gmpy2.exp(y) * self.turn
        fall = 1 / grow
        w = self.centre + self.half * (grow - fall)
        log_m, state = self.at.log_moment(w, near)
        value = gmpy2.exp(log_m - (w - self.payoff.shift) * self.k) / self.payoff.divisor(w)
        return (value * self.half * (grow + fall)).imag, state

    def peak(self) -> Any:
        """The largest term, on a coarse grid: how much is there to cancel."""
        state, most = self.state, mpfr(0)
        for j in range(1, 81):
            value, state = self.term(mpfr(j) / 2, state)
            if not gmpy2.is_finite(value):
                return mpfr("inf")
            most = max(most, abs(value))
        return most

    def run(self, first: Any, step: Any, small: Any, end: Any) -> tuple[Any, Any]:
        """Sum of the terms at ``first, first + step, ...`` to ``end`` or, without one, until they have died out."""
        total, state, y, quiet, biggest = mpfr(0), self.state, first, 0, mpfr(0)
        for _ in range(NODES):
            value, state = self.term(y, state)
            total += value
            size = abs(value)
            biggest = max(biggest, size)
            quiet = quiet + 1 if size < small * biggest else 0
            if (quiet > 8 and quiet * step > self.pause and end is None) or (end is not None and y > end):
                return total, y
            y += step
        raise NotReached("the integrand does not die out")

    def integrate(self, step: float, residue: Any, digits: int) -> Any:
        pi = gmpy2.const_pi()
        h = mpfr(step)
        small = mpfr(10) ** -(digits + 6)
        start = gmpy2.exp(self.top.real - (self.p - self.payoff.shift) * self.k) / self.payoff.divisor(self.p)
        start = start * (self.half * (self.turn + 1 / self.turn)).imag / 2
        total, end = self.run(h, h, small, None)
        total += start
        value = residue + total * h / pi
        for _ in range(HALVINGS):
            total += self.run(h / 2, h, small, end)[0]
            h /= 2
            finer = residue + total * h / pi
            if gmpy2.is_finite(finer) and abs(finer - value) <= abs(finer) * mpfr(10) ** -(0.6 * digits + 3):
                return finer
            value = finer
        raise NotReached(f"no agreement to {digits} digits at k = {float(self.k)}")
