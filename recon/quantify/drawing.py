"""What a picture of one voxel's fit needs: curves in the spectral domain and their errors."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon import figures
from recon.quantify.fitted import Fitted
from recon.quantify.noise import VoxelNoise
from recon.quantify.patterns import Pattern
from recon.result import Cube

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
SPARE_PPM = 2.0


def voxel_figure(
    cube: Cube,
    fitted: Fitted,
    patterns: Sequence[Pattern],
    voxel: tuple[int, int, int],
    display: figures.Display | None = None,
    limits_ppm: tuple[float, float] | None = None,
) -> Figure:
    """Spectrum, fit, species and residual of a voxel (z, y, x), in mA/m s.

    Species with several parts are drawn at the parts' mean composition.
    """
    display = display or figures.Display()
    times = np.asarray(cube.sample_times, float)
    axis = display.axis(times, cube.larmor_frequency, cube.reference_shift_ppm)
    matrix = display.matrix(times, axis, cube.larmor_frequency, cube.reference_shift_ppm)
    where = (slice(None), *voxel)
    rate = -2j * np.pi * fitted.shift_Hz[voxel] - fitted.decay_per_s[voxel]
    turn = np.exp(1j * fitted.phase_rad[voxel] + rate * times)
    parts = {}
    for place, pattern in enumerate(patterns):
        amount = float(fitted.amounts[place][voxel])
        error = float(fitted.standard_error[place][voxel])
        course = pattern.courses.mean(axis=1) * amount * turn
        name = f"{pattern.name} {_plain(amount, 3)} ± {_plain(error, 2)} mM"
        parts[name] = (matrix @ course).real * 1e3
    return figures.fitted_spectrum(
        axis,
        (matrix @ cube.values[where]).real * 1e3,
        (matrix @ fitted.model[where]).real * 1e3,
        spectral_error(cube, matrix, voxel) * 1e3,
        unit="mA/m s",
        parts=parts,
        limits_ppm=limits_ppm,
        grid=cube.grid,
        voxel=voxel,
    )


def _plain(value: float, digits: int) -> str:
    """A number without an exponent, rounded to so many digits."""
    return f"{float(f'{value:.{digits}g}'):,.10g}"


def spectral_error(cube: Cube, matrix: ComplexArray, voxel: tuple[int, int, int]) -> FloatArray:
    """Standard error of the real spectrum D M of a voxel, (F,), A/m times seconds.

    Noise is white within the space of the cube's time courses: with its orthonormal basis U and
    σ² per dimension the variance is ½ σ² Σ_k |D U|².
    """
    noise = VoxelNoise.of(cube)
    basis = np.eye(len(cube.values), dtype=complex)
    if noise.dimensions < len(cube.values):
        courses = cube.values.reshape(len(cube.values), -1).astype(complex)
        _, vectors = np.linalg.eigh(courses @ courses.conj().T)
        basis = vectors[:, -noise.dimensions :]
    power = (np.abs(matrix @ basis) ** 2).sum(axis=1)
    return np.asarray(float(noise.sigma[voxel]) * np.sqrt(0.5 * power))
