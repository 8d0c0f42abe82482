"""The noise of a cube's time samples, voxel by voxel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.result import Cube

FloatArray = NDArray[np.floating]

SKETCH = 64
BATCH = 1024
ROUNDING = 3e-7
"""Singular values of single-precision data below this share of the largest are rounding."""


@dataclass(frozen=True, eq=False)
class VoxelNoise:
    """White noise within the space that the cube's time courses span.

    Attributes
    ----------
    sigma
        Standard deviation of a complex sample, √E|n|², in each of the dimensions,
        (nz, ny, nx), A/m.
    dimensions
        How many there are: the number of times, or of the singular vectors that were kept.
    known
        Voxels whose noise is known, and which hold information.
    """

    sigma: FloatArray
    dimensions: int
    known: NDArray[np.bool_]

    @classmethod
    def of(cls, cube: Cube, noise_sd: FloatArray | None = None) -> VoxelNoise:
        """As stated (then white over all times), or from the cube's standard errors.

        A cube that was reconstructed on r leading singular vectors holds noise in those alone: if
        σ_t² are its errors over T times, each of the r dimensions has Σ σ_t²/r.

        Raises
        ------
        InputError
            No standard errors and none stated; none that is finite and positive.
        """
        dimensions = len(cube.values)
        if noise_sd is None:
            if cube.standard_error is None:
                mend = "draw replicas, or state the noise"
                raise InputError("has no standard errors", "cube", mend)
            dimensions = rank_of(cube)
            total = (cube.standard_error.astype(float) ** 2).sum(axis=0)
            noise_sd = np.sqrt(total / dimensions)
        sigma = np.array(np.broadcast_to(np.asarray(noise_sd, float), cube.grid.shape))
        if (sigma < 0).any():
            raise InputError("noise must not be negative", "fit")
        known = np.isfinite(sigma) & (sigma > 0) & (cube.values != 0).any(axis=0)
        if not known.any():
            raise InputError("noise must be finite and somewhere positive", "fit")
        sigma[~known] = sigma[known].max()
        return cls(sigma.astype(np.float32), dimensions, known)


def rank_of(cube: Cube) -> int:
    """Number of independent time courses that the cube's voxels are made of.

    Seen in random mixtures of all voxels; `SKETCH` courses or more are taken as no compression.
    """
    count = len(cube.values)
    courses = cube.values.reshape(count, -1)
    some = courses[:, :: max(1, courses.shape[1] // (4 * SKETCH))]
    rank = _sketched(some)  # cannot be more than that of all
    return rank if rank == count else _sketched(courses)


def _sketched(courses: NDArray[np.complexfloating]) -> int:
    """Rank seen in random mixtures; all of them from `SKETCH` on."""
    count, voxels = courses.shape
    width = min(count, SKETCH)
    random = np.random.default_rng(0)
    mixed = np.zeros((count, width), complex)
    for first in range(0, voxels, BATCH):
        part = courses[:, first : first + BATCH].astype(complex)
        mixed += part @ random.standard_normal((part.shape[1], width))
    values = np.linalg.eigvalsh(mixed.conj().T @ mixed)
    rank = int((values > ROUNDING**2 * values[-1]).sum())
    return max(1, rank) if rank < width else count
