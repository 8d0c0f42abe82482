"""A preconditioner from exact block solves at a few levels of local information.

Where channels are dead, gains vary or the view ends, G looks like c G₀ with a c that changes from
place to place, G₀ the blocks of ideal channels. With windows E_i over the voxels, Σ E_i² = 1,
E_i² the hat functions in log c of levels c_i:

    M⁻¹ = Σ_i E_i (c_i G₀ + S)⁻¹ E_i

which is Hermitian and positive definite. It is an additive Schwarz method with overlap decided by
the local information (Toselli & Widlund, Domain Decomposition Methods, for the family).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import reduce
from operator import add

import numpy as np
from numpy.typing import NDArray

from recon.forward.blocks import BlockQuadratic
from recon.symbol import Symbol

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]

EVEN = 1.05
"""Ratio of the extremes of local information below which one level serves."""


@dataclass(frozen=True)
class Levels:
    """How levels are laid: at most `ratio` apart, not below `floor` times the largest."""

    ratio: float = 10.0
    floor: float = 1e-3

    def of(self, local: FloatArray) -> FloatArray:
        """Levels, ascending."""
        top = float(local.max())
        bottom = max(float(local.min()), self.floor * top)
        if top <= EVEN * bottom:
            return np.array([float(local.mean())])
        count = 1 + int(np.ceil(np.log(top / bottom) / np.log(self.ratio) - 1e-6))
        return np.geomspace(bottom, top, count)


class GradedBlocks:
    """Block solves at levels of local information, blended over the voxels.

    Parameters
    ----------
    local
        Local information (nz, ny, nx).
    ideal
        c ↦ the data term with blocks c G₀.
    """

    def __init__(
        self,
        local: FloatArray,
        ideal: Callable[[float], BlockQuadratic],
        levels: Levels | None = None,
    ) -> None:
        self.levels = (levels or Levels()).of(local)
        self._blocks = [ideal(float(level)) for level in self.levels]
        self._windows = _windows(local, self.levels)

    def step(self, symbol: Symbol) -> Callable[[Array], Array]:
        """r ↦ M⁻¹ r."""
        steps = [blocks.step(symbol) for blocks in self._blocks]
        if len(steps) == 1:
            return lambda right: steps[0](right)

        def solve(right: Array) -> Array:
            parts = zip(self._windows, steps, strict=True)
            return reduce(add, (window * step(window * right) for window, step in parts))

        return solve


def _windows(local: FloatArray, levels: FloatArray) -> list[FloatArray]:
    """Square roots of hat functions in the logarithm of the information, (nz, ny, nx) each."""
    numbers = np.arange(len(levels))
    place = np.interp(np.log(np.maximum(local, levels[0])), np.log(levels), numbers)
    hats = np.clip(1 - np.abs(place - numbers[:, None, None, None]), 0, 1)
    return list(np.sqrt(hats).astype(np.float32))
