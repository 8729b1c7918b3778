"""The characteristic function at nodes, with as much beside it as a set of kernels needs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from engine.arrays import Complexes, Floats
from engine.protocols import Model
from engine.transform.kernels import Kernel

__all__ = ["Samples", "sample"]


@dataclass(frozen=True, slots=True)
class Samples:
    """``log phi``, the cap on its rounding in units of machine epsilon and, where a kernel asks for a derivative, the
    gradient with its caps (P + 1, ...)."""

    log_phi: Complexes
    size: Floats
    gradient: Any
    gradient_size: Any


def sample(model: Model, z: Complexes, tau: Any, kernels: list[Kernel], *, along_path: bool = False) -> Samples:
    """Evaluate at ``z``; the gradient only if some kernel has a parameter."""
    if all(kernel.parameter is None for kernel in kernels):
        log_phi, size = model.log_cf_sized(z, tau, along_path=along_path)
        return Samples(log_phi, size, None, None)
    found = model.log_cf_gradient(z, tau, along_path=along_path)
    return Samples(found.log_value, found.size, found.gradient, found.gradient_size)
