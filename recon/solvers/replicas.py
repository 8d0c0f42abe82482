"""Errors of a penalised estimate from re-noised replicas (the parametric bootstrap).

Each replica is the estimate from b* = G x̂ + Aᴴ W n with a fresh draw of the noise, started from
the solution. Their scatter is the error due to noise; their mean minus x̂ shows the bias that the
prior puts on an object like x̂. Source: Efron & Tibshirani, An Introduction to the Bootstrap.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.blocks import BlockQuadratic

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Scatter:
    """Standard deviation and bias per value, float32, of the unknown's shape."""

    deviation: FloatArray
    bias: Array

    @property
    def standard_error(self) -> FloatArray:
        """√(deviation² + bias²)."""
        return np.sqrt(self.deviation**2 + np.abs(self.bias) ** 2)

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
        solver: Callable[[BlockQuadratic], Array],
        progress: Callable[[int, int], None] | None = None,
    ) -> Scatter:
        """Scatter of `solver` about x̂ = `x`; the solver must start afresh from its own state."""
        random = np.random.default_rng(self.seed)
        expected = quadratic.normal(x)
        mean = np.zeros_like(x)
        spread = np.zeros(x.shape, x.real.dtype)
        for number in range(1, self.count + 1):
            other = solver(quadratic.with_linear(expected + quadratic.noise(random)))
            other = other - x
            step = (other - mean) / x.real.dtype.type(number)
            mean = mean + step
            spread += (np.conj(other - mean) * (step * x.real.dtype.type(number))).real
            if progress is not None:
                progress(number, self.count)
        return Scatter(np.sqrt(spread / (self.count - 1)), mean)
