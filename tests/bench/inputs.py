"""The smiles that benchmarks price, and 20-digit values of them.

The parameters are those of Heston's model in F. Fang and C. W. Oosterlee, "A novel pricing method for European options
based on Fourier-cosine series expansions", SIAM J. Sci. Comput. 31(2), 2008 (from memory): Feller's condition is
violated, one year, forward 100, no rates.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from engine import MODELS, Slice
from engine.models.heston import Heston
from engine.protocols import Model
from engine.status import Payoff
from tests.reference.mp_models import reference_model
from tests.reference.mp_prices import otm_values

__all__ = ["FORWARD", "PARAMETERS", "TOLERANCE", "drawn", "fang_oosterlee", "reference", "smile", "worst_errors"]

PARAMETERS = {"v0": 0.0175, "kappa": 1.5768, "theta": 0.0398, "sigma": 0.5751, "rho": -0.5711}
FORWARD = 100.0
TOLERANCE = 1e-10


def fang_oosterlee() -> Heston:
    """The published parameter set."""
    return Heston(**PARAMETERS)


def smile(model: Model, expiry: float, strikes: int, *, width: float = 5.0) -> Slice:
    """One expiry, out-of-the-money payoffs, strikes evenly in ``ln(K/F)`` over ``+-width`` standard deviations."""
    scale = math.sqrt(float(np.ravel(model.mean_variance(expiry))[0]))
    k = scale * np.linspace(-width, width, strikes)
    return Slice(expiry, FORWARD, 1.0, FORWARD * np.exp(k), np.full(strikes, Payoff.OTM, dtype=np.uint8))


def reference(one: Slice, at: Sequence[int]) -> np.ndarray:
    """20-digit out-of-the-money prices under the published set at the strikes ``at``, rounded to doubles."""
    chosen = one.strikes[list(at)].tolist()
    found = otm_values(reference_model("heston", PARAMETERS), one.expiry, one.forward, chosen, digits=20)
    return one.forward * one.discount_factor * np.array([float(value) for value in found])


def worst_errors(found: np.ndarray, exact: np.ndarray) -> tuple[float, float]:
    """Largest relative error, and largest absolute error per unit forward."""
    gap = np.abs(found - exact)
    return float(np.max(gap / exact)), float(np.max(gap)) / FORWARD


def drawn(count: int, *, seed: int) -> tuple[list[Heston], list[float]]:
    """Parameters over the whole box of Heston's model and expiries from an hour to fifty years.

    Half of the values of each parameter that starts at 0 are uniform over its range, half log-uniform over its last six
    decades; ``rho`` is uniform; expiries are log-uniform.
    """
    rng = np.random.default_rng(seed)
    columns = {}
    for spec in MODELS["heston"].parameters:
        plain = rng.uniform(spec.lower, spec.upper, count)
        small = spec.upper * 10.0 ** rng.uniform(-6.0, 0.0, count)
        columns[spec.name] = np.where((rng.random(count) < 0.5) & (spec.lower == 0.0), small, plain)
    models = [Heston(**{name: float(column[i]) for name, column in columns.items()}) for i in range(count)]
    hour = 1.0 / (365.0 * 24.0)
    expiries = np.exp(rng.uniform(math.log(hour), math.log(50.0), count))
    return models, np.clip(expiries, hour, 50.0).tolist()
