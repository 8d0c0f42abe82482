"""The voxel grid above the sensor, and its lateral frequency lattice.

Axes: x and y lie in the diamond face along the camera's columns and rows, z points away from the
diamond into the slice, with z = 0 at the face. Arrays run (z, y, x) in C order; vectors run
(x, y, z). The lateral origin is the centre of voxel [:, 0, 0]: gradient phases are zero there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError

FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Grid:
    """A regular grid of voxels.

    Attributes
    ----------
    shape
        Number of voxels (nz, ny, nx).
    voxel
        Voxel edges (dz, dy, dx) in metres.
    base_height
        Height of the lowest voxels' lower face above the diamond face, in metres.
    """

    shape: tuple[int, int, int]
    voxel: tuple[float, float, float]
    base_height: float = 0.0

    def __post_init__(self) -> None:
        if len(self.shape) != 3 or min(self.shape) < 1:
            raise InputError(f"grid shape {self.shape} needs three counts of at least 1", "grid")
        if len(self.voxel) != 3 or not min(self.voxel) > 0 or not np.all(np.isfinite(self.voxel)):
            raise InputError(f"voxel edges {self.voxel} m must be three positive lengths", "grid")
        if not self.base_height >= 0:
            raise InputError(f"base height {self.base_height} m must not be negative", "grid")

    @property
    def heights(self) -> FloatArray:
        """Voxel centre heights above the diamond face, (nz,), metres."""
        return self.base_height + (np.arange(self.shape[0]) + 0.5) * self.voxel[0]

    @property
    def y(self) -> FloatArray:
        """Voxel centre positions along y, (ny,), metres."""
        return np.arange(self.shape[1]) * self.voxel[1]

    @property
    def x(self) -> FloatArray:
        """Voxel centre positions along x, (nx,), metres."""
        return np.arange(self.shape[2]) * self.voxel[2]

    @property
    def lattice_step(self) -> tuple[float, float]:
        """Spacing of the lateral frequency lattice (along y, along x), rad/m: 2π / extent."""
        _, ny, nx = self.shape
        return 2 * np.pi / (ny * self.voxel[1]), 2 * np.pi / (nx * self.voxel[2])

    @property
    def size(self) -> int:
        """Number of voxels."""
        return int(np.prod(self.shape))

    def refined(self, factor: tuple[int, int, int]) -> Grid:
        """The grid of the sub-voxels that split each voxel by `factor` (along z, y, x).

        Sub-voxel [0, 0, 0] is centred at −(d − d/f)/2 laterally in this grid's coordinates, so
        use `sub_positions` for positions in this grid's frame.
        """
        shape = tuple(n * f for n, f in zip(self.shape, factor, strict=True))
        voxel = tuple(d / f for d, f in zip(self.voxel, factor, strict=True))
        return Grid(shape, voxel, self.base_height)  # type: ignore[arg-type]

    def sub_positions(
        self, factor: tuple[int, int, int]
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Centres of sub-voxels (z, y, x) in this grid's frame, metres."""

        def split(count: int, edge: float, parts: int) -> FloatArray:
            return (np.arange(count * parts) + 0.5) * (edge / parts)

        (nz, ny, nx), (dz, dy, dx) = self.shape, self.voxel
        z = self.base_height + split(nz, dz, factor[0])
        return z, split(ny, dy, factor[1]) - dy / 2, split(nx, dx, factor[2]) - dx / 2
