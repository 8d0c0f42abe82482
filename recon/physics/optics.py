"""What the optics and the camera do to the fluorescence image of the sensor layer."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]


def optical_transfer(
    wavenumber: ArrayLike, numerical_aperture: float, wavelength: float
) -> FloatArray:
    """Diffraction-limited transfer of incoherent light by a round, clear pupil, unitless.

    (2/π) (arccos ν − ν √(1 − ν²)) for ν = κ λ/(4π NA) ≤ 1 and 0 beyond: the pupil's
    autocorrelation, 1 at κ = 0, cut off at 2 NA/λ cycles per metre.
    Source: Goodman, Introduction to Fourier Optics, the chapter on imaging with incoherent light.

    Parameters
    ----------
    wavenumber
        Magnitude of the lateral wavevector on the sensor side, rad/m, any shape.
    numerical_aperture
        On the sensor side.
    wavelength
        Of the fluorescence in vacuum, m.
    """
    cutoff = 4 * np.pi * numerical_aperture / wavelength
    ratio = np.minimum(np.abs(np.asarray(wavenumber, dtype=np.float64)) / cutoff, 1.0)
    overlap = np.arccos(ratio) - ratio * np.sqrt(1 - ratio**2)
    return np.asarray(2 / np.pi * overlap, dtype=np.float64)


def pixel_footprint(
    wavenumber_y: ArrayLike, wavenumber_x: ArrayLike, pixel: float | tuple[float, float]
) -> FloatArray:
    """Fourier average over a rectangular camera pixel, unitless; the two components broadcast.

    sinc(κy p_y/2) sinc(κx p_x/2) with sinc(u) = sin(u)/u.

    Parameters
    ----------
    wavenumber_y, wavenumber_x
        Components of the lateral wavevector on the sensor side, rad/m.
    pixel
        Pixel edge, or edges along (y, x), projected onto the sensor layer, m.
    """
    edge_y, edge_x = np.broadcast_to(np.asarray(pixel, dtype=np.float64), 2) / (2 * np.pi)
    along_y = np.sinc(np.asarray(wavenumber_y, dtype=np.float64) * edge_y)
    along_x = np.sinc(np.asarray(wavenumber_x, dtype=np.float64) * edge_x)
    return np.asarray(along_y * along_x, dtype=np.float64)
