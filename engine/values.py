"""Out-of-the-money values of any kernel for slices of any models: the transform, or Black's formula where it applies.

Slices are grouped by the kind of their model and each group goes through in one batch. A slice under Black's model,
or one whose variance is zero, has closed forms: with ``d1 = -k / s + s / 2``, ``d2 = d1 - s`` and the normal density
``n``,

    vanilla           Black's out-of-the-money value, d/ds = n(d1)
    digital           P(X > k) = N(d2) or P(X < k) = N(-d2), d P(X > k) / ds = -n(d2) d1 / s
    share digital     N(d1) or N(-d1)
    density           f = n(d2) / s, f' = f d2 / s

and ``ds = sqrt(tau) d volatility = s / (2 tau) d tau``. Their bound is the rounding of ``k`` and ``s`` times the
conditions of the formula, a few units besides.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from engine.arrays import EPS, Floats, Ints
from engine.black import otm_value
from engine.models.black import Black
from engine.protocols import Model
from engine.slices import Batch
from engine.transform.inversion import Contour, invert
from engine.transform.kernels import Kernel
from engine.transform.reach import Strikes

__all__ = ["Group", "kernel_values"]

_NO_VARIANCE = 1e-32  # total variance below which every vanilla is worth less than rounding of the forward
_TINY = float(np.finfo(np.float64).tiny)


@dataclass(frozen=True, slots=True)
class Group:
    """Slices of one kind of model: their numbers (m,), the positions ``at`` (n,) and ``lengths`` (m,) of their
    strikes, the stacked model, values and bounds (K, n) in the order of the kernels, and how each slice was done
    (None: closed form)."""

    members: Ints
    at: Ints
    lengths: Ints
    model: Model
    kernels: list[Kernel]
    value: Floats
    bound: Floats
    contours: list[Contour | None]


def kernel_values(
    models: Sequence[Model],
    batch: Batch,
    k: Floats,
    *,
    kernels_of: Callable[[type[Model]], list[Kernel]],
    tolerance: float,
    node_limit: int,
) -> list[Group]:
    """Values of the kernels that ``kernels_of`` names for each kind of model; the first must be the vanilla.

    ``models`` one per slice, ``k`` (n,) log-moneyness of the batch's strikes. Raises RefusedError past ``node_limit``.
    """
    kinds: dict[type[Model], list[int]] = {}
    for i, model in enumerate(models):
        kinds.setdefault(type(model), []).append(i)
    out = []
    for kind, chosen in kinds.items():
        members = np.array(chosen)
        stacked = kind.stack([models[i] for i in chosen])
        out.append(_group(stacked, batch, k, members, kernels_of(kind), tolerance, node_limit))
    return out


def _group(
    model: Model, batch: Batch, k: Floats, members: Ints, kernels: list[Kernel], tolerance: float, node_limit: int
) -> Group:
    at = batch.points(members)
    tau = batch.expiry[members][:, None]
    variance = np.reshape(model.mean_variance(tau), -1)
    closed = (variance < _NO_VARIANCE) | isinstance(model, Black)
    lengths = batch.lengths[members]
    if not closed.any():
        found = invert(model, tau, _strikes(k[at], lengths), tolerance=tolerance, kernels=kernels, limit=node_limit)
        return Group(members, at, lengths, model, kernels, found.value, found.bound, list(found.contours))
    point_closed = closed.repeat(lengths)
    value, bound = np.zeros((len(kernels), at.shape[0])), np.zeros((len(kernels), at.shape[0]))
    s = np.repeat(np.sqrt(variance), lengths)[point_closed]
    expiry = np.repeat(batch.expiry[members], lengths)[point_closed]
    value[:, point_closed], bound[:, point_closed] = closed_form(kernels, k[at][point_closed], s, expiry)
    if not isinstance(model, Black):
        bound[:, point_closed] += _degenerate(kernels, s)
    contours: list[Contour | None] = [None] * members.shape[0]
    rest = np.flatnonzero(~closed)
    if rest.shape[0]:
        strikes = _strikes(k[at][~point_closed], lengths[rest])
        found = invert(model.take(rest), tau[rest], strikes, tolerance=tolerance, kernels=kernels, limit=node_limit)
        value[:, ~point_closed], bound[:, ~point_closed] = found.value, found.bound
        for i, contour in zip(rest, found.contours, strict=True):
            contours[i] = contour
    return Group(members, at, lengths, model, kernels, value, bound, contours)


def _degenerate(kernels: list[Kernel], s: Floats) -> Floats:
    """What is not known of a law whose deviation ``s`` is all but nothing, (K, n): a vanilla is at most ``E|e^X -
    1|``, about ``s``."""
    out = np.zeros((len(kernels), s.shape[0]))
    for i, kernel in enumerate(kernels):
        unknown = np.inf if not kernel.markov else 1.0
        out[i] = np.where(s == 0.0, 0.0, 2.0 * s if kernel.markov and kernel.order == 2 else unknown)
    return out


def _strikes(k: Floats, lengths: Ints) -> Strikes:
    return Strikes(k, np.arange(lengths.shape[0]).repeat(lengths), lengths.cumsum() - lengths)


def closed_form(kernels: list[Kernel], k: Floats, s: Floats, tau: Floats) -> tuple[Floats, Floats]:
    """Closed forms (K, n) and their bounds at ``k``, total deviation ``s >= 0`` and expiry ``tau`` (n,).

    At ``s = 0`` the limits; a density or a derivative at ``k = 0`` has none there, its value is 0 and its bound
    infinite.
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
        ratio = np.where(k == 0.0, 0.0, k / s)
        d1, d2 = 0.5 * s - ratio, -0.5 * s - ratio
        steep = np.where(s > 0.0, 2.0 + ratio * ratio + s * s + np.abs(k), 0.0)
        value, bound = np.empty((len(kernels), k.shape[0])), np.empty((len(kernels), k.shape[0]))
        for i, kernel in enumerate(kernels):
            found = _one_closed_form(kernel, k, s, tau, d1, d2)
            lost = ~np.isfinite(found)
            value[i] = np.where(lost, 0.0, found)
            rounding = np.where(found == 0.0, 0.0, EPS * (16.0 + 8.0 * steep) * np.abs(found)) + _TINY
            bound[i] = np.where(lost, np.inf, rounding)
            if kernel.markov:  # a vanilla per unit forward and a probability are at most 1
                bound[i] = np.minimum(bound[i], 1.0)
    return value, bound


def _one_closed_form(kernel: Kernel, k: Floats, s: Floats, tau: Floats, d1: Floats, d2: Floats) -> Floats:
    call = k >= 0.0
    if kernel.parameter is not None:
        along_s = _normal(d1) if kernel.order == 2 else -_normal(d2) * d1 / s
        by_parameter = np.sqrt(tau) if kernel.parameter == 0 else 0.5 * s / tau
        return np.where((s == 0.0) & (k != 0.0), 0.0, along_s * by_parameter)
    if kernel.order == 2:
        return otm_value(k, s)
    if kernel.order == 1:
        d = d1 if kernel.shift == 1.0 else d2
        return np.where((s == 0.0) & (k == 0.0), 0.0, ndtr(np.where(call, d, -d)))
    density = _normal(d2) / s
    found = density if kernel.order == 0 else density * d2 / s
    return np.where((s == 0.0) & (k != 0.0), 0.0, found)


def _normal(d: Floats) -> Floats:
    return np.asarray(np.exp(-0.5 * d * d) / np.sqrt(2.0 * np.pi))
