"""Synthetic experiments of any size for the benchmarks."""

from __future__ import annotations

import numpy as np

from recon.forward import ForwardModel
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.tables import VariableDensity
from tests.cases import instrument

MICRON = 1e-6
NOISE = 1e-9


def experiment(
    shape: tuple[int, int, int], shots: int, basis: np.ndarray | None = None
) -> tuple[ForwardModel, Instrument]:
    """A camera with one channel per voxel of 4 µm, variable-density shots; basis (times, comps)."""
    grid = Grid(shape, (4 * MICRON,) * 3)
    apparatus = instrument("camera", grid, pixel_um=4.0)
    basis = np.ones((1, 1), complex) if basis is None else basis
    table = VariableDensity(shots=shots).protocol(grid, np.arange(len(basis)) * 8e-3)
    return ForwardModel.build(grid, apparatus, table, basis, NOISE), apparatus


def random_complex(shape: tuple[int, ...], seed: int = 0) -> np.ndarray:
    """Complex64 normal numbers."""
    rng = np.random.default_rng(seed)
    values = rng.standard_normal((*shape, 2), np.float32)
    return values.view(np.complex64)[..., 0]
