"""Moment generating functions of the models in multiple precision, written from the papers and apart from the engine.

Everything here speaks ``M(w) = E[exp(w X)]`` with ``X = ln(S_T / F)`` and complex ``w`` (the engine's ``z`` is
``-i w``), on gmpy2 numbers. A model answers five questions:

- ``log_moment(w, near)``: ``log M(w)`` in the closed upper half plane; ``near`` is the state handed back by the
  previous node of a path that starts on the real axis (``None`` on the axis itself), so that a complex logarithm is
  continued along the path and never read off its principal branch;
- ``edges(bits=None)``: the open interval of finite moments from inside, to full precision or, where a search is needed,
  to the bits asked for;
- ``slope()``: the ``s`` in ``log M(w) ~ s w`` as ``|w|`` grows in the upper half plane (``None``: Gaussian decay);
- ``sector(p)``: the open range of angles in which a contour through ``p`` may leave the real axis;
- ``extra_digits()``: decimal digits lost to cancellation inside the formulas.

Heston's function is the cosh/sinh solution of its Riccati equation (Heston 1993, Rev. Financ. Stud. 6(2); the
explosion time is the first zero of the same cosh/sinh combination, Andersen and Piterbarg 2007, Finance Stoch. 11).
That zeros and branch points lie on the real ``w`` axis is Lucic (2007), "On singularities in the Heston model";
equation numbers are not given because the papers were not at hand: formulas from memory, checked against the Riccati
equation itself and published prices in ``test_mp_prices_selfcheck.py``.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import gmpy2
from gmpy2 import mpc, mpfr

__all__ = [
    "Bates",
    "Black",
    "DoubleHeston",
    "Heston",
    "Kou",
    "Merton",
    "NormalInverseGaussian",
    "VarianceGamma",
    "reference_model",
]

INF = float("inf")
QUARTER = (math.pi / 4, 3 * math.pi / 4)


def _real(w: Any) -> bool:
    return w.imag == 0


@dataclass(frozen=True)
class Black:
    """Black (1976): ``X`` normal with variance ``volatility^2 tau``."""

    volatility: Any

    def prepare(self, tau: Any) -> _Gaussian:
        return _Gaussian(mpfr(self.volatility) ** 2 * mpfr(tau))


class _Gaussian:
    def __init__(self, variance: Any) -> None:
        self.variance = variance

    def sector(self, p: Any) -> tuple[float, float]:
        return QUARTER

    def drift(self) -> Any:
        return mpc(-self.variance / 2)

    def log_moment(self, w: Any, near: Any) -> tuple[Any, Any]:
        return self.variance / 2 * w * (w - 1), None

    def edges(self, *, bits: int | None = None) -> tuple[Any, Any]:
        return -INF, INF

    def slope(self) -> Any:
        return None

    def width(self) -> float:
        return math.sqrt(float(self.variance))


@dataclass(frozen=True)
class Heston:
    """``dv = kappa (theta - v) dt + sigma sqrt(v) dW``, correlation ``rho`` with the spot."""

    v0: Any
    kappa: Any
    theta: Any
    sigma: Any
    rho: Any

    def extra_digits(self, tau: Any) -> int:
        if self.sigma == 0:
            return 0
        kappa, theta, sigma, t = float(self.kappa), float(self.theta), float(self.sigma), float(tau)
        level = kappa * theta / sigma**2 * (1 + kappa * t)  # of the absolute rounding error of the first term
        spread = math.sqrt(max(float(self.mean_variance(tau)), 0.0)) or 1.0
        turn = t * (kappa + sigma / spread)  # |D tau|: how much of 1 - exp(-D tau) survives
        return 4 + math.ceil(math.log10(level + 1) + math.log10(1 + 1 / turn))

    def mean_variance(self, tau: Any) -> Any:
        """``E int_0^tau v dt``."""
        v0, kappa, theta, t = mpfr(self.v0), mpfr(self.kappa), mpfr(self.theta), mpfr(tau)
        if kappa == 0:
            return v0 * t
        return theta * t - (v0 - theta) * gmpy2.expm1(-kappa * t) / kappa

    def prepare(self, tau: Any) -> Any:
        if self.sigma == 0:
            return _Gaussian(self.mean_variance(tau))
        return _HestonAt(self, tau)


class _HestonAt:
    def sector(self, p: Any) -> tuple[float, float]:
        return QUARTER

    def __init__(self, model: Heston, tau: Any) -> None:
        self.v0, self.kappa, self.theta = mpfr(model.v0), mpfr(model.kappa), mpfr(model.theta)
        self.sigma, self.rho, self.tau = mpfr(model.sigma), mpfr(model.rho), mpfr(tau)
        self.variance = self.sigma**2
        self.rho_sigma = self.rho * self.sigma
        self.level = self.kappa * self.theta / self.variance
        self.two_pi = 2 * gmpy2.const_pi()
        self.mean = model.mean_variance(tau)

    def log_moment(self, w: Any, near: Any) -> tuple[Any, Any]:
        b = self.kappa - self.rho_sigma * w
        c = w * (w - 1)
        square = b * b - self.variance * c
        if _real(w):
            return self._on_axis(w.real, b.real, c.real, square.real)
        d = gmpy2.sqrt(square)  # the square meets no negative real in the open upper half plane: its roots are real
        e = gmpy2.exp(-d * self.tau)
        gap = 1 - e
        f = (1 + e) / 2 + b * gap / (2 * d)  # cosh(d tau/2) + (b/d) sinh(d tau/2) = exp(d tau/2) f
        log_f = gmpy2.log(f)
        turns = gmpy2.rint((near - log_f.imag) / self.two_pi)
        imag = log_f.imag + turns * self.two_pi
        a = self.level * ((b - d) * self.tau - 2 * mpc(log_f.real, imag))
        return a + self.v0 * c * gap / (2 * d * f), imag

    def _on_axis(self, p: Any, b: Any, c: Any, square: Any) -> tuple[Any, Any]:
        """Real ``p`` inside the strip; the state is the phase of ``f`` as a limit from the upper half plane."""
        half = self.tau / 2
        if square > 0:
            d = gmpy2.sqrt(square)
            e = gmpy2.exp(-d * self.tau)
            f = (1 + e) / 2 + b * (1 - e) / (2 * d)
            full = d * half + gmpy2.log(f)
            ratio = (1 - e) / (2 * d * f)
            phase = mpfr(0)
        else:
            d = gmpy2.sqrt(-square)
            sine = gmpy2.sin(d * half) / d if d != 0 else half
            combination = gmpy2.cos(d * half) + b * sine
            full = gmpy2.log(combination)
            ratio = sine / combination
            phase = d * half if p > 0 else -d * half  # D -> -i|D| to the right of the cut, +i|D| to its left
        return mpc(self.level * (b * self.tau - 2 * full) + self.v0 * c * ratio), phase

    def explosion_time(self, p: Any) -> Any:
        """The first ``t`` at which ``cosh(D t/2) + (b/D) sinh(D t/2)`` vanishes; infinite when it never does."""
        p = mpfr(p)
        c = p * (p - 1)
        if c <= 0:
            return mpfr("inf")
        b = self.kappa - self.rho_sigma * p
        square = b * b - self.variance * c
        if square < 0:
            d = gmpy2.sqrt(-square)
            return 2 / d * gmpy2.atan2(d, -b)
        if b >= 0:
            return mpfr("inf")
        d = gmpy2.sqrt(square)
        if d == 0:
            return -2 / b
        return gmpy2.log((d - b) ** 2 / (self.variance * c)) / d

    def edges(self, *, bits: int | None = None) -> tuple[Any, Any]:
        bits = bits or gmpy2.get_context().precision
        return -self._edge(lambda t: -t, bits), 1 + self._edge(lambda t: 1 + t, bits)

    def _edge(self, place: Any, bits: int) -> Any:
        """Distance from the unit interval at which the explosion time drops to ``tau``."""
        low = high = mpfr(1)
        while self.explosion_time(place(low)) <= self.tau:
            low /= 16
            if low < mpfr("1e-60"):
                return low
        while self.explosion_time(place(high)) > self.tau:
            high *= 16
            if high > mpfr("1e60"):
                return high
        for _ in range(bits + 30):
            middle = (low + high) / 2 if high < 2 * low else gmpy2.sqrt(low * high)
            if self.explosion_time(place(middle)) > self.tau:
                low = middle
            else:
                high = middle
            if high - low <= high * mpfr(2) ** (3 - bits):
                break
        return low

    def slope(self) -> Any:
        size = (self.v0 + self.kappa * self.theta * self.tau) / self.sigma
        return size * mpc(-self.rho, gmpy2.sqrt(1 - self.rho**2))

    def width(self) -> float:
        return math.sqrt(float(self.mean))


@dataclass(frozen=True)
class DoubleHeston:
    """Christoffersen, Heston and Jacobs (2009): two independent Heston factors add in the logarithm of the spot."""

    factors: tuple[Heston, Heston]

    def extra_digits(self, tau: Any) -> int:
        return max(factor.extra_digits(tau) for factor in self.factors)

    def prepare(self, tau: Any) -> Any:
        return _Sum([factor.prepare(tau) for factor in self.factors])


@dataclass(frozen=True)
class Merton:
    """Merton (1976): Gaussian log jumps, mean ``jump_mean``, deviation ``jump_stdev``, rate ``jump_intensity``."""

    volatility: Any
    jump_intensity: Any
    jump_mean: Any
    jump_stdev: Any

    def prepare(self, tau: Any) -> Any:
        jumps = _GaussianJumps(self.jump_intensity, self.jump_mean, self.jump_stdev, tau)
        return _Sum([Black(self.volatility).prepare(tau), jumps])

    def mixture(self, tau: Any) -> Iterator[tuple[Any, Any, Any]]:
        """Given the number of jumps the price is lognormal: weights, log forwards, variances, after the mean number."""
        count, mean = mpfr(self.jump_intensity) * mpfr(tau), mpfr(self.jump_mean)
        square, variance = mpfr(self.jump_stdev) ** 2, mpfr(self.volatility) ** 2 * mpfr(tau)
        weight = gmpy2.exp(-count)
        drift = -count * gmpy2.expm1(mean + square / 2)
        n = 0
        while True:
            yield weight, drift + n * (mean + square / 2), variance + n * square
            n += 1
            weight *= count / n


@dataclass(frozen=True)
class Bates:
    """Bates (1996): Heston with Merton's jumps."""

    v0: Any
    kappa: Any
    theta: Any
    sigma: Any
    rho: Any
    jump_intensity: Any
    jump_mean: Any
    jump_stdev: Any

    @property
    def heston(self) -> Heston:
        return Heston(self.v0, self.kappa, self.theta, self.sigma, self.rho)

    def extra_digits(self, tau: Any) -> int:
        return self.heston.extra_digits(tau)

    def prepare(self, tau: Any) -> Any:
        jumps = _GaussianJumps(self.jump_intensity, self.jump_mean, self.jump_stdev, tau)
        return _Sum([self.heston.prepare(tau), jumps])


class _GaussianJumps:
    """Within 45 degrees of the imaginary axis ``J(w) = exp(mean w + stdev^2 w^2 / 2)`` dies out; the drift is left."""

    def __init__(self, intensity: Any, mean: Any, stdev: Any, tau: Any) -> None:
        self.count = mpfr(intensity) * mpfr(tau)
        self.mean, self.half = mpfr(mean), mpfr(stdev) ** 2 / 2
        self.compensator = gmpy2.exp(self.mean + self.half) - 1

    def sector(self, p: Any) -> tuple[float, float]:
        """A line that leaves ``p`` leaning by ``a`` first sees ``|J|`` grow: by the exponential of ``(m sin a)^2`` over
        ``4 half cos 2a``, ``m = mean + 2 half p``. ``a`` is kept so small that the jumps' exponent grows by 2 at most.
        """
        if self.count == 0:
            return QUARTER
        slope = abs(self.mean + 2 * self.half * p)
        at_p = self.count * gmpy2.exp(p * (self.mean + self.half * p))
        growth = float(gmpy2.log1p(2 / at_p))
        bend = 4 * float(self.half / slope**2) * growth if slope != 0 else INF
        lean = math.pi / 4 if math.isinf(bend) else math.asin(math.sqrt(bend / (1 + 2 * bend)))
        lean = max(lean, 0.02)
        return math.pi / 2 - lean, math.pi / 2 + lean

    def log_moment(self, w: Any, near: Any) -> tuple[Any, Any]:
        if self.count == 0:
            return mpc(0), None
        return self.count * (gmpy2.exp(w * (self.mean + self.half * w)) - 1 - self.compensator * w), None

    def edges(self, *, bits: int | None = None) -> tuple[Any, Any]:
        return -INF, INF

    def slope(self) -> Any:
        return mpc(-self.count * self.compensator)

    def width(self) -> float:
        return math.sqrt(float(self.count * (self.mean**2 + 2 * self.half)))


class _Sum:
    """Independent parts: logarithms of moments add, strips meet."""

    def __init__(self, parts: list[Any]) -> None:
        self.parts = parts
        self.mixed = any(isinstance(part, _GaussianJumps | _ExponentialJumps) for part in parts)

    def log_moment(self, w: Any, near: Any) -> tuple[Any, Any]:
        total, states = mpc(0), []
        for i, part in enumerate(self.parts):
            value, state = part.log_moment(w, None if near is None else near[i])
            total += value
            states.append(state)
        return total, tuple(states)

    def edges(self, *, bits: int | None = None) -> tuple[Any, Any]:
        pairs = [part.edges(bits=bits) for part in self.parts]
        return max(pair[0] for pair in pairs), min(pair[1] for pair in pairs)

    def sector(self, p: Any) -> tuple[float, float]:
        sectors = [part.sector(p) for part in self.parts]
        return max(sector[0] for sector in sectors), min(sector[1] for sector in sectors)

    def slope(self) -> Any:
        slopes = [part.slope() for part in self.parts]
        if all(s is None for s in slopes):
            return None
        return sum((part.drift() if s is None else s for part, s in zip(self.parts, slopes, strict=True)), mpc(0))

    def width(self) -> float:
        return math.sqrt(sum(part.width() ** 2 for part in self.parts))


@dataclass(frozen=True)
class VarianceGamma:
    """Madan, Carr and Chang (1998): Brownian motion of drift ``theta``, volatility ``sigma`` at a gamma time."""

    sigma: Any
    theta: Any
    nu: Any

    def prepare(self, tau: Any) -> Any:
        return _VarianceGammaAt(self, tau)


class _VarianceGammaAt:
    def sector(self, p: Any) -> tuple[float, float]:
        return (0.0, math.pi)

    def __init__(self, model: VarianceGamma, tau: Any) -> None:
        self.nu, self.power = mpfr(model.nu), mpfr(tau) / mpfr(model.nu)
        self.linear = mpfr(model.theta) * self.nu
        self.square = mpfr(model.sigma) ** 2 * self.nu / 2
        self.drift = self.power * gmpy2.log(1 - self.linear - self.square)
        self.variance = mpfr(tau) * (mpfr(model.sigma) ** 2 + mpfr(model.theta) ** 2 * self.nu)

    def log_moment(self, w: Any, near: Any) -> tuple[Any, Any]:
        return self.drift * w - self.power * gmpy2.log(1 - w * (self.linear + self.square * w)), None

    def edges(self, *, bits: int | None = None) -> tuple[Any, Any]:
        root = gmpy2.sqrt(self.linear**2 + 4 * self.square)
        return -2 / (root - self.linear), 2 / (root + self.linear)

    def slope(self) -> Any:
        return mpc(self.drift)

    def width(self) -> float:
        return math.sqrt(float(self.variance))


@dataclass(frozen=True)
class NormalInverseGaussian:
    """Barndorff-Nielsen (1997): ``alpha`` tail, ``beta`` asymmetry, ``delta`` scale per year."""

    alpha: Any
    beta: Any
    delta: Any

    def prepare(self, tau: Any) -> Any:
        return _NormalInverseGaussianAt(self, tau)


class _NormalInverseGaussianAt:
    def sector(self, p: Any) -> tuple[float, float]:
        return (0.0, math.pi)

    def __init__(self, model: NormalInverseGaussian, tau: Any) -> None:
        self.alpha, self.beta, self.scale = mpfr(model.alpha), mpfr(model.beta), mpfr(model.delta) * mpfr(tau)
        self.gamma = gmpy2.sqrt(self.alpha**2 - self.beta**2)
        self.drift = -self.scale * (self.gamma - gmpy2.sqrt(self.alpha**2 - (self.beta + 1) ** 2))

    def log_moment(self, w: Any, near: Any) -> tuple[Any, Any]:
        root = gmpy2.sqrt((self.alpha - self.beta - w) * (self.alpha + self.beta + w))
        return self.drift * w + self.scale * (self.gamma - root), None

    def edges(self, *, bits: int | None = None) -> tuple[Any, Any]:
        return -self.alpha - self.beta, self.alpha - self.beta

    def slope(self) -> Any:
        return mpc(self.drift, self.scale)

    def width(self) -> float:
        return math.sqrt(float(self.scale * self.alpha**2 / self.gamma**3))


@dataclass(frozen=True)
class Kou:
    """Kou (2002): double-exponential log jumps, up with ``up_probability`` (of rate ``up_rate``), else down."""

    volatility: Any
    jump_intensity: Any
    up_probability: Any
    up_rate: Any
    down_rate: Any

    def prepare(self, tau: Any) -> Any:
        return _Sum([Black(self.volatility).prepare(tau), _ExponentialJumps(self, tau)])


class _ExponentialJumps:
    """``J`` is rational with real poles and dies out in every direction off the axis."""

    def sector(self, p: Any) -> tuple[float, float]:
        return (0.0, math.pi)

    def __init__(self, model: Kou, tau: Any) -> None:
        self.count, self.up = mpfr(model.jump_intensity) * mpfr(tau), mpfr(model.up_probability)
        self.rate_up, self.rate_down = mpfr(model.up_rate), mpfr(model.down_rate)
        self.compensator = self._jump(mpfr(1)) - 1

    def _jump(self, w: Any) -> Any:
        return self.up * self.rate_up / (self.rate_up - w) + (1 - self.up) * self.rate_down / (self.rate_down + w)

    def log_moment(self, w: Any, near: Any) -> tuple[Any, Any]:
        return self.count * (self._jump(w) - 1 - self.compensator * w), None

    def edges(self, *, bits: int | None = None) -> tuple[Any, Any]:
        if self.count == 0:
            return -INF, INF
        return -self.rate_down if self.up < 1 else -INF, self.rate_up if self.up > 0 else INF

    def slope(self) -> Any:
        return mpc(-self.count * self.compensator)

    def width(self) -> float:
        second = 2 * self.up / self.rate_up**2 + 2 * (1 - self.up) / self.rate_down**2
        return math.sqrt(float(self.count * second))


_BY_NAME: dict[str, Any] = {
    "black": Black,
    "heston": Heston,
    "bates": Bates,
    "merton": Merton,
    "variance_gamma": VarianceGamma,
    "kou": Kou,
    "normal_inverse_gaussian": NormalInverseGaussian,
}


def reference_model(name: str, parameters: dict[str, Any]) -> Any:
    """The reference twin of a model of the engine, from its name and its parameters by their public names."""
    if name == "double_heston":
        first, second = (Heston(**factor) for factor in parameters["factors"])
        return DoubleHeston((first, second))
    if name in _BY_NAME:
        return _BY_NAME[name](**parameters)
    raise KeyError(f"no reference for the model {name!r}: write one before it may be priced")
