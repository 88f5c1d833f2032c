"""Robust losses: how much of a constraint's chi-square counts, and the weight that follows.

A loss maps s = r' C^-1 r to rho(s) <= s. The solver uses the weight rho'(s), and for the curvature along the residual
the ratio 2 s rho''(s) / rho'(s), here called bend (Triggs et al. 2000, section 4.3). `width` is in standard deviations,
the unit of sqrt(s).
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from hybridtrack.errors import OptionError

Array = np.ndarray


class Loss(Protocol):
    """Anything with a cost and a weight for stacks of chi-squares."""

    def cost(self, chi_square: Array) -> Array:
        """rho(s)."""

    def weight(self, chi_square: Array) -> Array:
        """rho'(s), between 0 and 1."""

    def bend(self, chi_square: Array) -> Array:
        """2 s rho''(s) / rho'(s), at most 0."""


def _require_positive(width: float) -> None:
    if not (np.isfinite(width) and width > 0.0):
        raise OptionError(f"loss width: expected a positive number of standard deviations, got {width}")


@dataclass(frozen=True)
class Quadratic:
    """No robustness: every constraint counts in full."""

    def cost(self, chi_square: Array) -> Array:
        """rho(s) = s."""
        return chi_square

    def weight(self, chi_square: Array) -> Array:
        """One."""
        return np.ones_like(chi_square)

    def bend(self, chi_square: Array) -> Array:
        """Zero."""
        return np.zeros_like(chi_square)


@dataclass(frozen=True)
class Huber:
    """Quadratic inside `width`, linear outside (Huber 1964)."""

    width: float

    def __post_init__(self) -> None:
        _require_positive(self.width)

    def cost(self, chi_square: Array) -> Array:
        """rho(s) = s inside, 2 k sqrt(s) - k^2 outside."""
        inside = chi_square <= self.width**2
        return np.where(inside, chi_square, 2.0 * self.width * np.sqrt(chi_square) - self.width**2)

    def weight(self, chi_square: Array) -> Array:
        """1 inside, k / sqrt(s) outside."""
        return self.width / np.maximum(np.sqrt(chi_square), self.width)

    def bend(self, chi_square: Array) -> Array:
        """0 inside, -1 outside: a linear cost has no curvature along the residual."""
        return np.where(chi_square <= self.width**2, 0.0, -1.0)


@dataclass(frozen=True)
class GemanMcClure:
    """Cost that levels off at width^2: a gross outlier pulls with a vanishing weight (Geman and McClure 1985)."""

    width: float

    def __post_init__(self) -> None:
        _require_positive(self.width)

    def cost(self, chi_square: Array) -> Array:
        """rho(s) = c^2 s / (c^2 + s)."""
        return self.width**2 * chi_square / (self.width**2 + chi_square)

    def weight(self, chi_square: Array) -> Array:
        """(c^2 / (c^2 + s))^2."""
        return (self.width**2 / (self.width**2 + chi_square)) ** 2

    def bend(self, chi_square: Array) -> Array:
        """-4 s / (c^2 + s)."""
        return -4.0 * chi_square / (self.width**2 + chi_square)
