"""Small data terms for the solvers' tests, from the registry of cases."""

from __future__ import annotations

import numpy as np

from recon.forward import BlockQuadratic, ForwardOperator, accumulate
from recon.grid import Grid
from tests.cases import BASES, NOISE, Case, instrument, protocol


def small_case(shots: int = 12, grid: Grid | None = None, basis: str = "decays") -> Case:
    grid = grid or Grid((2, 8, 8), (1e-6, 1e-6, 1e-6))
    table = protocol(grid, True, False, (1,), shots)
    return Case("small", grid, instrument(grid=grid), table, BASES[basis])


def small_quadratic(real: bool = True, noise: float = 1.0, seed: int = 0, **how) -> tuple:
    """A scaled data term of unit sensitivity, the true unknown, and the dense whitened model."""
    case = small_case(**how)
    operator = ForwardOperator(case.model, np.complex128)
    rng = np.random.default_rng(seed)
    shape = operator.object_shape
    empty = np.zeros(operator.sample_shape, np.complex64)
    unit = 1 / accumulate(case.model, [(slice(0, len(empty)), empty)]).sensitivity()
    x = np.zeros(shape)
    x[:, :, 2:6, 1:5] = 8.0
    x = x if real else x * np.exp(0.7j)
    amounts = x * unit[:, None, None, None]
    y = operator.apply(amounts.astype(complex))
    n = rng.standard_normal(y.shape) + 1j * rng.standard_normal(y.shape)
    averages = np.sqrt(case.protocol.averages)[:, None, None, None]
    y = y + noise * NOISE * np.sqrt(0.5) * n / averages
    statistics = accumulate(case.model, [(slice(0, len(y)), y)])
    return BlockQuadratic(statistics, real).scaled(unit), x, (case, operator, unit, y)
