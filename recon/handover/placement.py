"""Where the slice lies: from voxel indices to millimetres in the instrument's or a user's frame."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from recon.errors import InputError, InputWarning
from recon.grid import Grid

FloatArray = NDArray[np.float64]
ALLOWANCE = 1e-6
TOLERATED = 1e-3


@dataclass(frozen=True)
class Placement:
    """A rigid motion from the instrument's frame to a user's frame (a stage, a microscope).

    r_user = rotation · r_instrument + shift. The instrument's frame has x and y in the diamond
    face with the origin at the centre of the first voxel, and z = 0 at the face.

    Attributes
    ----------
    rotation
        Three rows of a rotation matrix.
    shift_um
        Shift along the user's x, y, z.
    frame
        Name of the user's frame, for the sidecars.
    """

    rotation: tuple[tuple[float, float, float], ...] = (
        (1.0, 0.0, 0.0),
        (0.0, 1.0, 0.0),
        (0.0, 0.0, 1.0),
    )
    shift_um: tuple[float, float, float] = (0.0, 0.0, 0.0)
    frame: str = "instrument"

    def __post_init__(self) -> None:
        turn = np.asarray(self.rotation, float)
        if turn.shape != (3, 3) or not np.isfinite(turn).all():
            raise InputError("the rotation needs nine finite numbers", "placement")
        off = np.abs(turn @ turn.T - np.eye(3)).max()
        if off > ALLOWANCE or np.linalg.det(turn) < 0:
            raise InputError(
                "the matrix is no rotation (sheared, scaled or mirrored)",
                "placement",
                "give a rigid motion; mirror the camera's frame in the instrument's description",
            )
        if len(self.shift_um) != 3 or not np.isfinite(self.shift_um).all():
            raise InputError("the shift needs three finite numbers", "placement")

    @classmethod
    def from_matrix(cls, matrix_um: ArrayLike, frame: str = "stage") -> Placement:
        """From a 4 × 4 matrix that takes micrometres to micrometres."""
        matrix = np.asarray(matrix_um, float)
        if matrix.shape != (4, 4) or not np.array_equal(matrix[3], [0, 0, 0, 1]):
            raise InputError("the matrix must be 4 x 4 with last row 0 0 0 1", "placement")
        rows = tuple(tuple(float(v) for v in row) for row in matrix[:3, :3])
        x, y, z = (float(v) for v in matrix[:3, 3])
        return cls(rows, (x, y, z), frame)  # type: ignore[arg-type]

    @classmethod
    def turned(cls, angle_deg: float, shift_um: Sequence[float], frame: str = "stage") -> Placement:
        """A turn about z, then a shift."""
        c, s = np.cos(np.radians(angle_deg)), np.sin(np.radians(angle_deg))
        matrix = np.eye(4)
        matrix[:2, :2] = [[c, -s], [s, c]]
        matrix[:3, 3] = shift_um
        return cls.from_matrix(matrix, frame)

    def affine(self, grid: Grid) -> FloatArray:
        """Voxel indices (i, j, k, 1) along (x, y, z) to millimetres, (4, 4)."""
        dz, dy, dx = grid.voxel
        voxel = np.diag([dx * 1e3, dy * 1e3, dz * 1e3, 1.0])
        voxel[2, 3] = grid.heights[0] * 1e3
        motion = np.eye(4)
        motion[:3, :3] = self.rotation
        motion[:3, 3] = np.asarray(self.shift_um) * 1e-3
        return motion @ voxel

    def check_precision(self, grid: Grid) -> None:
        """Warn where the file's single precision moves voxels by more than 1e-3 of their edge.

        The format stores the shift in millimetres as float32: 50 mm is kept to 4 nm.
        """
        shift = self.affine(grid)[:3, 3]
        off = np.abs(shift.astype(np.float32) - shift).max() * 1e-3 / min(grid.voxel)
        if off > TOLERATED:
            warnings.warn(
                f"the shift is rounded by {off:.2g} of a voxel in the file; "
                "choose a frame whose origin lies nearer to the slice",
                InputWarning,
                stacklevel=3,
            )


INSTRUMENT = Placement()
