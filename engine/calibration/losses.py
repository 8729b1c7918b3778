"""What a large residual costs: the square, or a robust loss whose scale is read off the residuals.

For quotes, with ``z = (r / scale)^2`` and the cost ``scale^2 sum rho(z) / 2``: ``rho = z`` (linear), ``2 (sqrt(1 + z) -
1)`` (soft_l1), ``z`` below 1 and ``2 sqrt(z) - 1`` above (huber). The rows of a prior, behind those of the quotes, are
always quadratic.

Reference: P. Huber, "Robust Statistics" (1981), chapters 4 and 7 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from engine.arrays import Floats

__all__ = ["Loss"]

_EFFICIENT = 1.345  # Huber's constant: 95 % efficient where errors are normal
_NORMAL = 1.4826  # normal standard deviations per median absolute deviation
_LEAST = 0.01  # of a residual's unit, that is 1e-4 in volatility: below it there are no outliers worth the name


@dataclass(frozen=True, slots=True)
class Loss:
    """``name`` as in the settings; ``scale`` in the unit of the residuals; ``quotes``: how many rows are quotes."""

    name: str
    scale: float
    quotes: int

    @classmethod
    def linear(cls) -> Loss:
        """Plain least squares."""
        return cls("linear", 1.0, 0)

    @classmethod
    def scaled(cls, name: str, residuals: Floats, quotes: int) -> Loss:
        """A robust loss with its scale from the residuals of a linear fit."""
        own = residuals[:quotes] * np.sqrt(quotes)
        spread = _NORMAL * float(np.median(np.abs(own - np.median(own))))
        return cls(name, _EFFICIENT * max(spread, _LEAST) / np.sqrt(quotes), quotes)

    @property
    def robust(self) -> bool:
        """Whether it is anything but the square."""
        return self.name != "linear"

    def of_squares(self, squares: Floats) -> Floats:
        """``scale^2 rho(f^2 / scale^2)`` and its first two derivatives by ``f^2``, (3, n + m)."""
        z = squares / self.scale**2
        out = np.stack([squares, np.ones_like(z), np.zeros_like(z)])
        own = slice(0, self.quotes)
        if self.name == "soft_l1":
            t = 1.0 + z[own]
            out[:, own] = (self.scale**2 * 2.0 * (np.sqrt(t) - 1.0), t**-0.5, -0.5 * t**-1.5 / self.scale**2)
        elif self.name == "huber":
            far = z[own] > 1.0
            root = np.sqrt(np.where(far, z[own], 1.0))
            out[0, own] = np.where(far, self.scale**2 * (2.0 * root - 1.0), squares[own])
            out[1, own] = 1.0 / root
            out[2, own] = np.where(far, -0.5 * root**-3 / self.scale**2, 0.0)
        return out

    def cost(self, residuals: Floats) -> float:
        """Half the sum, the optimiser's cost."""
        return float(0.5 * self.of_squares(residuals * residuals)[0].sum())

    def influence(self, residuals: Floats) -> Floats:
        """Derivative of the cost by each residual."""
        return np.asarray(self.of_squares(residuals * residuals)[1] * residuals)

    def steepness(self, residuals: Floats) -> Floats:
        """Second derivative of the cost by each residual."""
        squares = residuals * residuals
        _, first, second = self.of_squares(squares)
        return np.asarray(first + 2.0 * second * squares)
