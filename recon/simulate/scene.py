"""The fine grid of a simulation: magnetisation, positions, true wavevectors, padding."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy import constants

from recon.errors import InputError
from recon.grid import Grid
from recon.instrument import Camera, Instrument
from recon.physics.dipole import magnetisation_direction
from recon.physics.magnetisation import polarised_magnetisation, thermal_polarisation
from recon.physics.real_space import FineVoxels, SensorSheet
from recon.protocol import Protocol
from recon.specimen import Specimen

Wavevectors = NDArray[np.float64]

BLUR_REACH = 16
"""How far the light beyond the view is followed, in units of λ/(2 NA)."""

LEAST_MARGIN = 8
"""Fine voxels of light beyond the view at least; in the outer half it fades to nothing."""


@dataclass(frozen=True)
class Scene:
    """Everything the sums need, laid out on the fine grid.

    `magnetisation` (species, nz, ny, nx) A/m; `y`, `x` fine positions in the frame of the grid;
    `nuclear` (shots, 3), `sensor` (shots, 2) true wavevectors; `margin` and `places` (y, x) of the
    region of the layer whose light matters, and `padded` its transform's length.
    """

    instrument: Instrument
    protocol: Protocol
    grid: Grid
    magnetisation: NDArray[np.float32]
    y: NDArray[np.float64]
    x: NDArray[np.float64]
    nuclear: Wavevectors
    sensor: Wavevectors
    margin: tuple[int, int]
    places: tuple[int, int]
    padded: tuple[int, int]

    @classmethod
    def build(
        cls,
        specimen: Specimen,
        instrument: Instrument,
        protocol: Protocol,
        refinement: tuple[int, int],
        jitter: float,
        seed: int,
    ) -> Scene:
        """Lay it out; `refinement` (axial, lateral) comes on top of the specimen's own."""
        axial, lateral = refinement
        rz, ry, rx = specimen.refinement
        factor = (rz * axial, ry * lateral, rx * lateral)
        grid = specimen.grid.refined(factor)
        _check_view(grid, instrument)
        magnetisation = _magnetisation(specimen, instrument)
        for axis, times in ((1, axial), (2, lateral), (3, lateral)):
            magnetisation = np.repeat(magnetisation, times, axis) if times > 1 else magnetisation
        generator = np.random.default_rng([seed, len(protocol), 1])
        nuclear = _jittered(protocol.nuclear_wavevector, jitter, generator)
        sensor = _jittered(protocol.sensor_wavevector, jitter, generator)
        _, y, x = (np.asarray(p, np.float64) for p in specimen.grid.sub_positions(factor))
        margin, places, padded = _layout(grid, instrument)
        return cls(
            instrument, protocol, grid, magnetisation, y, x, nuclear, sensor, margin, places, padded
        )

    def sheet(self, sensing_axis: int) -> SensorSheet:
        """The sensor layer as seen along one sensing axis."""
        instrument = self.instrument
        return SensorSheet(
            instrument.depth,
            instrument.thickness,
            instrument.sensing_direction(sensing_axis),
            magnetisation_direction(instrument.bias_direction),
        )

    def layers(self) -> Iterator[tuple[FineVoxels, NDArray[np.float32]]]:
        """Fine voxel layers that hold something, with their magnetisation (species, ny, nx)."""
        return (layer for layer in self.all_layers() if layer[1].any())

    def all_layers(self) -> Iterator[tuple[FineVoxels, NDArray[np.float32]]]:
        """Every fine voxel layer, upwards."""
        for level, height in enumerate(self.grid.heights):
            content = self.magnetisation[:, level]
            first = (-self.margin[0], -self.margin[1])
            yield (
                FineVoxels(float(height), self.grid.voxel, first, self.padded, self.places),
                content,
            )

    def axes(self) -> Iterator[tuple[int, NDArray[np.intp], Wavevectors]]:
        """Sensing axes used, their shots, and the largest |k| (x, y, z) among those."""
        for axis in np.unique(self.protocol.sensing_axis):
            shots = np.flatnonzero(self.protocol.sensing_axis == axis)
            yield int(axis), shots, np.abs(self.nuclear[shots]).max(axis=0)


def _check_view(grid: Grid, instrument: Instrument) -> None:
    """Refuse a fine grid that does not span the view in whole pixels."""
    channels = instrument.detector.channels()
    sides = zip("yx", instrument.view, channels, grid.shape[1:], grid.voxel[1:], strict=True)
    for name, view, pixels, count, edge in sides:
        if abs(count * edge - view) > 1e-6 * view:
            raise InputError(
                f"spans {count * edge * 1e6:g} um along {name}, the view {view * 1e6:g} um",
                "specimen",
                "make them equal",
            )
        if count % pixels:
            raise InputError(
                f"{count} fine voxels along {name} do not divide into {pixels} pixels",
                "specimen",
                "choose another refinement",
            )


def _layout(
    grid: Grid, instrument: Instrument
) -> tuple[tuple[int, int], tuple[int, int], tuple[int, int]]:
    """Margin beyond the view, number of places, and padded length, each along (y, x)."""
    _, *counts = grid.shape
    reach = 0.0
    if isinstance(instrument.detector, Camera):
        optics = instrument.optics
        reach = BLUR_REACH * optics.wavelength / (2 * optics.numerical_aperture)
    margin = [max(LEAST_MARGIN, int(np.ceil(reach / edge))) for edge in grid.voxel[1:]]
    places = [scipy.fft.next_fast_len(n + 2 * m) for n, m in zip(counts, margin, strict=True)]
    padded = [scipy.fft.next_fast_len(n + p - 1) for n, p in zip(counts, places, strict=True)]
    return (margin[0], margin[1]), (places[0], places[1]), (padded[0], padded[1])


def _magnetisation(specimen: Specimen, instrument: Instrument) -> NDArray[np.float32]:
    """Magnetisation available to a shot of unit amplitude, A/m, (species, fine z, y, x)."""
    if specimen.maps is None:
        raise InputError("has no concentration maps", "specimen")
    field = float(np.linalg.norm(instrument.bias_field))
    thermal = thermal_polarisation(field, instrument.temperature)
    scales = [
        polarised_magnetisation(
            constants.N_A * species.equivalent_nuclei,
            thermal if species.polarisation is None else species.polarisation,
        )
        for species in specimen.species
    ]
    factors = np.asarray(scales, np.float32)[:, None, None, None]
    return np.asarray(specimen.maps * factors)


def _jittered(
    wavevectors: Wavevectors, jitter: float, generator: np.random.Generator
) -> Wavevectors:
    """Wavevectors with every component off by a relative normal error."""
    return np.asarray(wavevectors * (1 + jitter * generator.standard_normal(wavevectors.shape)))
