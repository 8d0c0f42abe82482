"""The response of a layer of fine voxels, from the dipole formula in real space.

Nothing here uses the closed form of `recon.physics.dipole.field_kernel`: the field of a point
dipole is summed over Gauss–Legendre nodes of the sensor layer and of the fine voxel, and becomes
a spectrum only to convolve it, zero-padded, with a map.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import ArrayLike, NDArray
from scipy import constants

FloatArray = NDArray[np.float64]

MOST_NODES = 12
UNIT = 1e-6


@dataclass(frozen=True)
class SensorSheet:
    """The sensor layer and the two directions of the measurement.

    Attributes
    ----------
    depth, thickness
        Upper depth below the face and thickness, m.
    sensing_direction
        Unit vector n (x, y, z).
    magnetisation_direction
        Complex vector m (x, y, z).
    """

    depth: float
    thickness: float
    sensing_direction: FloatArray
    magnetisation_direction: NDArray[np.complex128]

    def field(
        self, height: float, offset_y: FloatArray, offset_x: FloatArray
    ) -> NDArray[np.complex64]:
        """Layer average of a unit dipole's field, T per A·m², offsets (ny,), (nx,) → (ny, nx).

        (μ0/4π) [3 (n·r)(m·r)/r² − n·m]/r³ with r from the dipole at `height` to the sensor.
        Worked in single precision, with lengths in `UNIT`.
        """
        n, m = self.sensing_direction, self.magnetisation_direction.astype(np.complex64)
        y = (offset_y / UNIT).astype(np.float32)[:, None]
        x = (offset_x / UNIT).astype(np.float32)[None, :]
        lateral = x * x + y * y
        zeroth, first, second = self._inverse_fifth_powers(height, lateral)
        along_n = np.float32(n[0]) * x + np.float32(n[1]) * y
        along_m = m[0] * x + m[1] * y
        tilt = np.float32(n[2])
        product = along_m * (along_n * zeroth + tilt * first)
        product += m[2] * (along_n * first + tilt * second)
        product *= np.float32(3)
        product -= np.complex64(n @ m) * (lateral * zeroth + second)
        product *= np.float32(constants.mu_0 / (4 * np.pi) / UNIT**3)
        return np.asarray(product)

    def _inverse_fifth_powers(
        self, height: float, lateral: NDArray[np.float32]
    ) -> tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.float32]]:
        """Layer averages of r_z^p / |r|⁵ for p = 0, 1, 2, given x² + y², lengths in `UNIT`."""
        zeroth, first, second = (np.zeros_like(lateral) for _ in range(3))
        for below, weight in zip(*self._nodes(height), strict=True):
            down = np.float32(-(height + below) / UNIT)
            square = lateral + down * down
            power = np.sqrt(square)
            power *= square
            power *= square
            np.divide(np.float32(weight), power, out=power)
            zeroth += power
            power *= down
            first += power
            power *= down
            second += power
        return zeroth, first, second

    def _nodes(self, height: float) -> tuple[FloatArray, FloatArray]:
        """Depths and weights that average over the layer, for a source at `height`."""
        half = self.thickness / 2
        count = node_count(1 + (height + self.depth) / half) if half > 0 else 1
        return gauss_nodes(self.depth + half, half, count)


@dataclass(frozen=True)
class FineVoxels:
    """A layer of equal fine voxels at one height and the places where its field is wanted.

    Attributes
    ----------
    height
        Height of the voxel centres, m.
    edges
        Voxel edges (z, y, x), m.
    first
        Index of the first wanted place relative to the first voxel (y, x), not positive.
    padded
        Length of the padded transform (y, x): voxels + places − 1 at least.
    places
        Number of wanted places (y, x).
    """

    height: float
    edges: tuple[float, float, float]
    first: tuple[int, int]
    padded: tuple[int, int]
    places: tuple[int, int]

    def response(self, sheet: SensorSheet, largest_wavevector: ArrayLike) -> VoxelResponse:
        """The response to every node within the voxel, for wavevectors (x, y, z) up to a bound."""
        axes = self._nodes(sheet, np.asarray(largest_wavevector, np.float64)[::-1])
        counts = tuple(len(nodes) for nodes, _ in axes)
        spectra = np.empty((*counts, *self.padded), np.complex64)
        for index in np.ndindex(*counts):
            z, y, x = (nodes[i] for (nodes, _), i in zip(axes, index, strict=True))
            field = sheet.field(self.height + z, self._offsets(0) - y, self._offsets(1) - x)
            spectra[index] = scipy.fft.fft2(field, workers=2, overwrite_x=True)
        spectra *= np.float32(np.prod(self.edges))
        return VoxelResponse(self.height, self.edges, axes, spectra)

    def node_total(self, sheet: SensorSheet, largest_wavevector: ArrayLike) -> int:
        """Number of spectra that `response` holds."""
        axes = self._nodes(sheet, np.asarray(largest_wavevector, np.float64)[::-1])
        return int(np.prod([len(nodes) for nodes, _ in axes]))

    def _nodes(
        self, sheet: SensorSheet, largest: FloatArray
    ) -> tuple[tuple[FloatArray, FloatArray], ...]:
        """Nodes and weights within the voxel along (z, y, x)."""
        distance = self.height + sheet.depth
        axes = []
        for axis, (edge, wave) in enumerate(zip(self.edges, largest, strict=True)):
            ratio = 2 * distance / edge
            # The nearest singularity lies beyond the end of the edge, or beside its middle.
            reach = ratio if axis == 0 else float(np.hypot(1, ratio))
            turn = wave * edge / 2
            count = max(node_count(reach), 1 + int(turn > 0.01) + int(turn))
            axes.append(gauss_nodes(0.0, edge / 2, count))
        return tuple(axes)

    def _offsets(self, axis: int) -> FloatArray:
        """Place minus voxel, in the transform's circular order, m."""
        order = np.arange(self.padded[axis])
        last = self.first[axis] + self.places[axis] - 1
        return np.where(order > last, order - self.padded[axis], order) * self.edges[axis + 1]


@dataclass(frozen=True)
class VoxelResponse:
    """Spectra of a fine voxel's response, one for every node within it.

    Attributes
    ----------
    height, edges
        Of the voxels, m.
    axes
        Nodes relative to the centre, and their weights, along (z, y, x).
    spectra
        Response of each node times the voxel's volume, (nodes z, y, x, padded y, x), T per A/m.
    """

    height: float
    edges: tuple[float, float, float]
    axes: tuple[tuple[FloatArray, FloatArray], ...]
    spectra: NDArray[np.complex64]

    def spectrum(self, wavevector: ArrayLike) -> NDArray[np.complex64]:
        """Response to a voxel filled with exp(i k·(r − lateral centre)), (padded y, x).

        The weights are scaled so that the voxel's mean of the wave is exact.
        """
        wave = np.asarray(wavevector, np.float64)[::-1]
        phases = [
            _wave_weights(nodes, weights, edge, k)
            for (nodes, weights), edge, k in zip(self.axes, self.edges, wave, strict=True)
        ]
        factors = phases[0][:, None, None] * phases[1][:, None] * phases[2]
        factors *= np.exp(1j * wave[0] * self.height)
        total = np.zeros(self.spectra.shape[3:], np.complex64)
        part = np.empty_like(total)
        for index in np.ndindex(factors.shape):  # a matrix product would wake idle threads
            total += np.multiply(self.spectra[index], np.complex64(factors[index]), out=part)
        return total


def gauss_nodes(centre: float, half: float, count: int) -> tuple[FloatArray, FloatArray]:
    """Gauss–Legendre nodes on centre ± half, and weights that sum to 1."""
    nodes, weights = np.polynomial.legendre.leggauss(count)
    return np.asarray(centre + half * nodes), np.asarray(weights / 2)


def node_count(reach: float, tolerance: float = 1e-4) -> int:
    """Nodes that integrate over −1 … 1 a function singular at distance `reach` from 0.

    The error of n Gauss nodes falls as ρ^(−2n), ρ = reach + √(reach² − 1) (Trefethen,
    Approximation Theory and Approximation Practice); capped at `MOST_NODES`.
    """
    if reach <= 1:
        return MOST_NODES
    radius = np.arccosh(reach)
    return int(np.clip(np.ceil(-np.log(tolerance) / (2 * radius)), 1, MOST_NODES))


def _wave_weights(
    nodes: FloatArray, weights: FloatArray, edge: float, wave: float
) -> NDArray[np.complex128]:
    """weights · exp(i k u), scaled to sum to the edge's exact mean sin(k e/2)/(k e/2)."""
    turned = weights * np.exp(1j * wave * nodes)
    return np.asarray(turned * (np.sinc(wave * edge / (2 * np.pi)) / turned.sum()))
