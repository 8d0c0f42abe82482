"""Errors of a penalised estimate from re-noised replicas (the parametric bootstrap).

Each replica is the estimate from b* = G x̂ + Aᴴ W n with a fresh draw of the noise, started from
the solution. Their scatter is the error due to noise; their mean minus x̂ shows the bias that the
prior puts on an object like x̂. Source: Efron & Tibshirani, An Introduction to the Bootstrap.

x̂ has already lost what the prior removes, so its replicas understate that loss. Two things make up
for part of it: they stop after a few iterations, while they still follow their noise more than the
converged estimate does, and a voxel's error is at least the r.m.s. of its neighbours' (one pinned
at a bound has none of its own). `bench/error_bars.py` measures what the intervals then cover.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter

from recon.errors import InputError
from recon.forward.blocks import BlockQuadratic

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]

NEIGHBOURS = 5


@dataclass(frozen=True)
class Scatter:
    """Standard deviation and bias per value, float32, of the unknown's shape."""

    deviation: FloatArray
    bias: Array

    @property
    def standard_error(self) -> FloatArray:
        """√(deviation² + bias²), at least its r.m.s. over the voxel's 5 × 5 neighbours."""
        square = self.deviation**2 + np.abs(self.bias) ** 2
        around = uniform_filter(square, (0, 0, NEIGHBOURS, NEIGHBOURS), mode="wrap")
        return np.sqrt(np.maximum(square, around))

    def bias_share(self) -> FloatArray:
        """Share of the mean squared error that is bias, (components,)."""
        axes = (1, 2, 3)
        bias = (np.abs(self.bias) ** 2).mean(axes)
        return bias / np.maximum(bias + (self.deviation**2).mean(axes), np.finfo(np.float32).tiny)


@dataclass(frozen=True)
class Replicas:
    """How many, from which seed, and how many iterations each from its warm start.

    Attributes
    ----------
    count
        Replicas.
    iterations
        Iterations per replica.
    seed
        Of the noise.
    """

    count: int = 50
    iterations: int = 6
    seed: int = 0

    def __post_init__(self) -> None:
        if self.count < 2 or self.iterations < 1:
            raise InputError("needs at least 2 replicas of 1 iteration", "replicas")

    def scatter(
        self,
        quadratic: BlockQuadratic,
        x: Array,
        solver: Callable[[Array], Array],
        progress: Callable[[int, int], None] | None = None,
    ) -> Scatter:
        """Scatter about x̂ = `x` of `solver`, a map from b to the estimate, afresh every time."""
        random = np.random.default_rng(self.seed)
        expected = quadratic.normal(x)
        mean = np.zeros_like(x)
        spread = np.zeros(x.shape, x.real.dtype)
        for number in range(1, self.count + 1):
            other = solver(expected + quadratic.noise(random))
            other = other - x
            step = (other - mean) / x.real.dtype.type(number)
            mean = mean + step
            spread += (np.conj(other - mean) * (step * x.real.dtype.type(number))).real
            if progress is not None:
                progress(number, self.count)
        return Scatter(np.sqrt(spread / (self.count - 1)), mean)
