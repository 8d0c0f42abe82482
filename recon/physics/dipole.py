"""The magnetic field of nuclear magnetisation at a sensor layer just below it.

Frame: z points from the diamond face (z = 0) into the slice; sensors lie at z = −δ with
depth ≤ δ ≤ depth + thickness. Lateral Fourier convention: f̂(κ) = Σ f(ρ) exp(−iκ·ρ).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import constants

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

_PARALLEL = 1e-9


def precession_frame(bias_direction: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Two unit vectors (e1, e2) that complete the bias direction b to a right-handed frame.

    e1 = (z × b)/|z × b|, or x where b is parallel to z; e2 = b × e1.

    Parameters
    ----------
    bias_direction
        Vector (x, y, z) of any length above zero.
    """
    direction = _unit(bias_direction)
    across = np.cross([0.0, 0.0, 1.0], direction)
    length = float(np.linalg.norm(across))
    first = across / length if length > _PARALLEL else np.array([1.0, 0.0, 0.0])
    return first, np.cross(direction, first)


def magnetisation_direction(bias_direction: ArrayLike) -> ComplexArray:
    """Complex direction m = e1 − i e2 of magnetisation circulating about the bias, (3,).

    The transverse magnetisation of protons is Re(M m) with M in A/m; a positive nuclear
    frequency f turns M as exp(−i 2π f t).
    """
    first, second = precession_frame(bias_direction)
    return np.asarray(first - 1j * second, dtype=np.complex128)


def field_kernel(
    wavenumber_y: ArrayLike,
    wavenumber_x: ArrayLike,
    heights: ArrayLike,
    voxel_height: float,
    sensing_direction: ArrayLike,
    magnetisation_direction: ArrayLike,
    depth: float,
    thickness: float,
    axial_wavenumber: float = 0.0,
) -> ComplexArray:
    """Layer-averaged field of voxel-thick sheets of magnetisation, (nz, ny, nx), T per A/m.

    With v = (iκx, iκy, κ), κ = |(κx, κy)|, n the sensing and m the magnetisation direction::

        K(κ, z) = (μ0/2) (n·v)(m·v)/κ · exp(−κd) (1 − exp(−κt))/(κt)
                  · ∫ exp(−κz' + i k_z z') dz'      over z − Δz/2 … z + Δz/2

    and K = 0 at κ = 0. A voxel's lateral footprint is not in it: see `lateral_footprint`.
    Source: upward continuation of the dipole field; Blakely, Potential Theory in Gravity and
    Magnetic Applications (1995).

    Parameters
    ----------
    wavenumber_y, wavenumber_x
        Lateral angular wavenumbers (ny,) and (nx,), rad/m.
    heights
        Voxel centre heights above the face (nz,), m.
    voxel_height
        Voxel edge along z, m.
    sensing_direction
        Unit vector (x, y, z) of the sensing axis.
    magnetisation_direction
        Complex vector (x, y, z); see the function of that name.
    depth, thickness
        The sensor layer's upper depth below the face and its thickness, m; a thickness of
        zero is a sheet.
    axial_wavenumber
        k_z of the nuclear gradient, rad/m.
    """
    along_y = np.asarray(wavenumber_y, dtype=np.float64)[:, None]
    along_x = np.asarray(wavenumber_x, dtype=np.float64)[None, :]
    lateral = surface_kernel(
        along_y, along_x, sensing_direction, magnetisation_direction, depth, thickness
    )
    decay = np.hypot(along_y, along_x) - 1j * axial_wavenumber
    lower = np.asarray(heights, dtype=np.float64)[:, None, None] - voxel_height / 2
    sheet = decay_integral(decay, voxel_height)
    return np.asarray((lateral * sheet) * np.exp(-decay * lower), dtype=np.complex128)


def surface_kernel(
    along_y: FloatArray,
    along_x: FloatArray,
    sensing_direction: ArrayLike,
    magnetisation_direction: ArrayLike,
    depth: float,
    thickness: float,
) -> ComplexArray:
    """Layer-averaged field of a sheet of unit magnetisation per area on the face, T per A.

    (μ0/2) (n·v)(m·v)/κ times the layer average of `field_kernel`; 0 at κ = 0. Magnetisation at
    height z adds exp(−κz). The components of the wavevector broadcast together.
    """
    wavenumber = np.hypot(along_y, along_x)
    lateral = _along(sensing_direction, along_y, along_x, wavenumber)
    lateral = lateral * _along(magnetisation_direction, along_y, along_x, wavenumber)
    present = wavenumber > 0
    lateral = np.divide(lateral, wavenumber, out=np.zeros_like(lateral), where=present)
    return lateral * (0.5 * constants.mu_0 * _layer_average(wavenumber, depth, thickness))


def lateral_footprint(wavenumber: ArrayLike, edge: float) -> FloatArray:
    """Fourier average over a voxel edge: sin(κ·edge/2)/(κ·edge/2), any shape, unitless.

    Parameters
    ----------
    wavenumber
        One component of the lateral wavevector, rad/m.
    edge
        The voxel's edge along that component, m.
    """
    cycles = np.asarray(wavenumber, dtype=np.float64) * (edge / (2 * np.pi))
    return np.asarray(np.sinc(cycles), dtype=np.float64)


def _unit(vector: ArrayLike) -> FloatArray:
    """The vector divided by its length."""
    array = np.asarray(vector, dtype=np.float64)
    return np.asarray(array / np.linalg.norm(array), dtype=np.float64)


def _along(
    direction: ArrayLike, along_y: FloatArray, along_x: FloatArray, wavenumber: FloatArray
) -> ComplexArray:
    """direction · (iκx, iκy, κ), without conjugation."""
    x, y, z = np.asarray(direction, dtype=np.complex128)
    return np.asarray(1j * (x * along_x + y * along_y) + z * wavenumber)


def _layer_average(wavenumber: FloatArray, depth: float, thickness: float) -> FloatArray:
    """Average of exp(−κδ) over depth ≤ δ ≤ depth + thickness."""
    exponent = wavenumber * thickness
    average = np.divide(
        -np.expm1(-exponent), exponent, out=np.ones_like(exponent), where=exponent > 0
    )
    return np.asarray(np.exp(-wavenumber * depth) * average)


def decay_integral(decay: ComplexArray, length: float) -> ComplexArray:
    """∫ exp(−s z) dz over 0 … length, for complex s; the length itself at s = 0."""
    return np.divide(
        -np.expm1(-decay * length), decay, out=np.full_like(decay, length), where=decay != 0
    )
