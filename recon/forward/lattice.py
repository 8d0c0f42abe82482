"""Wavevectors on the lateral frequency lattice, as whole numbers of lattice steps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.grid import Grid

IntArray = NDArray[np.integer]

# Largest distance from the lattice, in lattice steps, that is taken for rounding.
ROUNDING = 1e-3


@dataclass(frozen=True)
class LatticeEncoding:
    """One row per shot; lateral wavevectors in lattice steps, axial ones in rad/m.

    Attributes
    ----------
    nuclear
        Nuclear wavevector (shots, 2) along (y, x), whole lattice steps.
    sensor
        Sensor wavevector (shots, 2) along (y, x), whole lattice steps.
    axial
        Nuclear wavevector along z, (shots,), rad/m.
    sensing_axis
        Sensing axis, (shots,), counted from 0.
    amplitude
        Complex amplitude of the shot (flip angle, remaining polarisation), (shots,).
    weight
        Inverse noise variance of one complex sample of the shot, (shots,), 1/T².
    """

    nuclear: IntArray
    sensor: IntArray
    axial: NDArray[np.floating]
    sensing_axis: IntArray
    amplitude: NDArray[np.complexfloating]
    weight: NDArray[np.floating]

    def __len__(self) -> int:
        return len(self.axial)

    def subset(self, shots: slice | IntArray) -> LatticeEncoding:
        """The encoding of some of the shots, in the order given."""
        return LatticeEncoding(
            self.nuclear[shots],
            self.sensor[shots],
            self.axial[shots],
            self.sensing_axis[shots],
            self.amplitude[shots],
            self.weight[shots],
        )


def lattice_steps(wavevector: NDArray[np.floating], grid: Grid, name: str) -> IntArray:
    """Express lateral wavevectors (shots, 2), given as (x, y) in rad/m, in steps along (y, x).

    Raises
    ------
    InputError
        A wavevector lies off the lattice by more than rounding, or a nuclear one beyond the
        grid's Nyquist wavenumber π/voxel.
    """
    step_y, step_x = grid.lattice_step
    steps = wavevector[:, ::-1] / np.array([step_y, step_x])
    whole = np.rint(steps).astype(np.int64)
    off = np.abs(steps - whole).max(axis=1, initial=0.0)
    if off.size and off.max() > ROUNDING:
        shot = int(off.argmax())
        raise InputError(
            f"{name} wavevector lies {off[shot]:.3g} lattice steps off the frequency lattice",
            f"shot {shot}",
            "round it to whole multiples of 2π / field of view",
        )
    limit = np.array(grid.shape[1:]) // 2
    beyond = np.abs(whole).max(axis=0, initial=0) > limit
    if name == "nuclear" and beyond.any():
        shot = int((np.abs(whole) - limit).max(axis=1).argmax())
        raise InputError(
            f"{name} wavevector exceeds the grid's Nyquist wavenumber",
            f"shot {shot}",
            "use smaller voxels",
        )
    return whole
