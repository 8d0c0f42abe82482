"""What is solved: minimise over x  ½ xᴴ G x − Re bᴴ x + ½ ‖y‖² + Σ_i λ_i R_i(D_i x)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from recon.priors.base import Term
from recon.symbol import Symbol

Array = NDArray[np.inexact]


class Step(Protocol):
    """A quadratic step; data terms whose step is exact ignore the start."""

    def __call__(self, right: Array, start: Array | None = None) -> Array: ...


class Quadratic(Protocol):
    """The data term. `recon.forward.BlockQuadratic` is one whose step is exact."""

    @property
    def shape(self) -> tuple[int, int, int, int]: ...

    @property
    def dtype(self) -> np.dtype[Any]: ...

    @property
    def linear(self) -> Array:
        """b."""

    @property
    def largest(self) -> float:
        """Largest eigenvalue of G, or an upper bound."""

    def diagonal(self) -> NDArray[np.floating]:
        """Mean diagonal of G, (components, nz)."""

    def value(self, x: Array) -> float:
        """The data term at x, with its constant."""

    def misfit(self, x: Array) -> float:
        """Mean squared residual in units of the noise variance."""

    def normal(self, x: Array) -> Array:
        """G x."""

    def gradient(self, x: Array) -> Array:
        """G x − b."""

    def step(self, symbol: Symbol) -> Step:
        """The map r ↦ (G + symbol)⁻¹ r, exact or improved from a start."""


@dataclass(frozen=True)
class Weighted:
    """A bound prior and its weight λ."""

    term: Term
    weight: float = 1.0


@dataclass(frozen=True)
class Problem:
    """A data term and weighted priors."""

    quadratic: Quadratic
    terms: tuple[Weighted, ...]

    def objective(self, x: Array) -> float:
        """The function that is minimised."""
        value = self.quadratic.value(x)
        for part in self.terms:
            penalty = part.term.value(part.term.analyse(x))
            value += penalty if part.term.constraint else part.weight * penalty
        return value
