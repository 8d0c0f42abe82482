"""Wavevectors off the frequency lattice: the nearest lattice point, and winding in real space.

A calibrated gradient winds exp(i k·ρ) with a k that is no whole number of lattice steps. The
object is wound by the true k in real space before its FFT. The nearest lattice point serves the
block model that preconditions the solve; the phase that the difference makes at the middle of the
grid goes into that model's amplitude, so that the two agree best.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.lattice import IntArray
from recon.grid import Grid
from recon.protocol import Protocol

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

# Distance from the lattice, in steps, below which the shared FFT of the object serves.
EXACT = 1e-9


def nearest_steps(
    wavevector: FloatArray, grid: Grid, name: str, bounded: bool
) -> tuple[IntArray, FloatArray]:
    """Nearest lattice steps along (y, x), and what is left over.

    Parameters
    ----------
    wavevector
        (shots, 2) as (x, y), rad/m.
    bounded
        Refuse steps beyond the grid's Nyquist wavenumber π/voxel.

    Returns
    -------
    Whole steps (shots, 2), and the remainder (shots, 2), rad/m, both along (y, x).

    Raises
    ------
    InputError
        A wavevector is not finite or lies beyond the Nyquist wavenumber.
    """
    step = np.array(grid.lattice_step)
    exact = np.asarray(wavevector, float)[:, ::-1] / step
    if not np.isfinite(exact).all():
        shot = int(np.argmin(np.isfinite(exact).all(axis=1)))
        raise InputError(f"{name} wavevector is not finite", f"shot {shot}")
    whole = np.rint(exact).astype(np.int64)
    beyond = np.abs(whole) - np.array(grid.shape[1:]) // 2
    if bounded and (beyond > 0).any():
        raise InputError(
            f"{name} wavevector exceeds the grid's Nyquist wavenumber",
            f"shot {int(beyond.max(axis=1).argmax())}",
            "use smaller voxels",
        )
    remainder = (exact - whole) * step
    remainder[np.abs(exact - whole) <= EXACT] = 0.0
    return whole, remainder


def middle_phase(remainder: FloatArray, grid: Grid) -> ComplexArray:
    """exp(i δ·ρ) at the middle of the grid for remainders (shots, 2) along (y, x), (shots,)."""
    _, ny, nx = grid.shape
    middle = np.array([(ny - 1) * grid.voxel[1], (nx - 1) * grid.voxel[2]]) / 2
    return np.exp(1j * (remainder @ middle))


def winding(count: int, edge: float, wavenumber: float) -> ComplexArray:
    """Factors (count,) that wind by a wavenumber and order the FFT from −N/2 upwards.

    FFT(x · winding) at index i is the spectrum of x at κ − k with κ = (i − N//2) steps.
    """
    shift = 2 * np.pi * (count // 2) / count
    return np.exp(1j * (wavenumber * edge + shift) * np.arange(count))


def calibrated(
    protocol: Protocol, nuclear: FloatArray | None = None, sensor: FloatArray | None = None
) -> Protocol:
    """The protocol with the wavevectors that the gradients really wind.

    Parameters
    ----------
    nuclear
        (3, 3): true k = nuclear · nominal k, in (x, y, z); scales on the diagonal, shear beside it.
    sensor
        (2, 2): true q = sensor · nominal q, in (x, y).
    """
    k, q = protocol.nuclear_wavevector, protocol.sensor_wavevector
    for name, matrix, size in (("nuclear", nuclear, 3), ("sensor", sensor, 2)):
        if matrix is not None and (matrix.shape != (size, size) or not np.isfinite(matrix).all()):
            raise InputError(f"{name} gradient matrix must be finite, {size} x {size}", "gradients")
    k = k if nuclear is None else k @ nuclear.T
    q = q if sensor is None else q @ sensor.T
    return replace(protocol, nuclear_wavevector=k, sensor_wavevector=q)
