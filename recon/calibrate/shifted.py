"""Blocks of AᴴWA and AᴴWy for wavevectors off the lattice.

Where the object and the reach of the field stay clear of the grid's sides, a shot with any k is a
convolution: it measures h(κ') with the kernel taken at κ_f = κ' + k wherever that lies, and the
samples' transform at κ_c = κ_f + q. So the blocks of `recon.forward` remain, with every response
evaluated beside the lattice by what k and q leave over, and the samples turned back by as much.
On the lattice the two agree. In double precision, so that likelihoods can be differenced.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.calibrate.compressed import Compressed
from recon.calibrate.geometry_parameters import described
from recon.errors import InputError
from recon.forward.layout import Layout
from recon.forward.model import detector_binning
from recon.forward.off_lattice import nearest_steps
from recon.forward.statistics import Statistics
from recon.grid import Grid
from recon.instrument import Instrument
from recon.physics.dipole import field_kernel, lateral_footprint, magnetisation_direction
from recon.physics.optics import optical_transfer, pixel_footprint
from recon.protocol import Protocol

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
Pair = tuple[FloatArray, FloatArray]


def block_statistics(data: Compressed, values: dict[str, float]) -> Statistics:
    """b and blocks of G of a compressed record at a geometry, for an orthonormal time basis.

    Raises
    ------
    InputError
        The record has one detector, grid and view do not fit, or a wavevector is beyond the
        grid's Nyquist wavenumber.
    """
    grid = data.record.specimen.grid
    instrument, protocol = described(data.record.instrument, data.protocol, values)
    if instrument.camera is None:
        raise InputError(
            "one detector is not enough without a known sample",
            data.record.where,
            "use geometry_from_sample",
        )
    binning = detector_binning(grid, instrument)
    layout = Layout.of(grid.shape, binning)
    responses = _Responses(grid, instrument, protocol, binning)
    count, q = data.samples.shape[1], layout.block_size
    linear = np.zeros((count, *grid.shape), complex)
    normal = np.zeros((q, q, *layout.blocks), complex)
    share = 1 / np.prod(binning)
    for shot, (samples, weight) in enumerate(zip(data.samples, data.weight, strict=True)):
        response = responses.of(shot)
        linear += weight * response.conj() * responses.spectrum(shot, samples)[:, None]
        gathered = layout.gather(response[None])
        for row in range(q):
            normal[row, row:] += (share * weight * gathered[row].conj()) * gathered[row:]
    for row in range(q):
        normal[row + 1 :, row] = normal[row, row + 1 :].conj()
    return Statistics(
        grid, layout, linear, normal, np.eye(count, dtype=complex), data.energy, data.samples.size
    )


@dataclass(eq=False)
class _Responses:
    """What every shot multiplies the object's spectrum with, in the order of the FFT over κ'."""

    grid: Grid
    instrument: Instrument
    protocol: Protocol
    binning: tuple[int, int]
    _kernels: dict[tuple[float, ...], ComplexArray] = field(default_factory=dict)

    def __post_init__(self) -> None:
        wave = self.protocol.nuclear_wavevector[:, :2]
        self._steps, self._rest = nearest_steps(wave, self.grid, "nuclear", bounded=True)
        self._sensor = self.protocol.sensor_wavevector[:, ::-1]

    def of(self, shot: int) -> ComplexArray:
        """a F(κ') K(κ' + k, z) P(κ' + k + q), (nz, ny, nx)."""
        band_y, band_x = self._band(self._rest[shot])
        q_y, q_x = self._sensor[shot]
        k_y, k_x = self.protocol.nuclear_wavevector[shot, 1::-1]
        rows, columns = (
            lateral_footprint(band - k, edge)
            for band, k, edge in zip((band_y, band_x), (k_y, k_x), self.grid.voxel[1:], strict=True)
        )
        plane = self.protocol.amplitude[shot] * rows[:, None] * columns
        plane = plane * self._transfer(band_y + q_y, band_x + q_x)
        return self._placed(shot, self._kernel(shot) * plane)

    def spectrum(self, shot: int, samples: ComplexArray) -> ComplexArray:
        """Transform of samples (components, channels y, x) at κ' + k + q, (components, ny, nx)."""
        turned = samples.astype(complex)
        turn = self._rest[shot] + self._sensor[shot]
        for axis, (wave, pixel) in enumerate(zip(turn, self.instrument.pixel, strict=True)):
            count = samples.shape[1 + axis]
            phase = np.exp(-1j * wave * pixel * np.arange(count))
            turned *= phase[:, None] if axis == 0 else phase
        image = np.tile(scipy.fft.fft2(turned), (1, *self.binning))
        return self._placed(shot, scipy.fft.fftshift(image, axes=(-2, -1)))

    def _placed(self, shot: int, monotonic: ComplexArray) -> ComplexArray:
        """From κ_f = −N/2 … to the order of the FFT over κ'."""
        _, ny, nx = self.grid.shape
        shift = -(np.array([ny // 2, nx // 2]) + self._steps[shot])
        return np.roll(monotonic, shift, axis=(-2, -1))

    def _band(self, rest: FloatArray) -> Pair:
        band_y, band_x = (
            np.arange(-(n // 2), n - n // 2) * step + offset
            for n, step, offset in zip(
                self.grid.shape[1:], self.grid.lattice_step, rest, strict=True
            )
        )
        return band_y, band_x

    def _kernel(self, shot: int) -> ComplexArray:
        """Field kernel (nz, ny, nx); the last one is kept for shots that share it."""
        axis = int(self.protocol.sensing_axis[shot])
        axial = float(self.protocol.nuclear_wavevector[shot, 2])
        key = (axis, axial, *map(float, self._rest[shot]))
        if key not in self._kernels:
            if len(self._kernels) >= 4:
                self._kernels.pop(next(iter(self._kernels)))
            instrument = self.instrument
            self._kernels[key] = field_kernel(
                *self._band(self._rest[shot]),
                self.grid.heights,
                self.grid.voxel[0],
                instrument.sensing_direction(axis),
                magnetisation_direction(instrument.bias_direction),
                instrument.depth,
                instrument.thickness,
                axial,
            )
        return self._kernels[key]

    def _transfer(self, wave_y: FloatArray, wave_x: FloatArray) -> ComplexArray:
        """Optics and pixel, with the phase of the pixels' centres, (ny, nx)."""
        optics, pixel = self.instrument.optics, self.instrument.pixel
        radius = np.hypot(wave_y[:, None], wave_x)
        transfer = optical_transfer(radius, optics.numerical_aperture, optics.wavelength)
        transfer = transfer * pixel_footprint(wave_y[:, None], wave_x, pixel)
        centre_y, centre_x = (np.array(pixel) - self.grid.voxel[1:]) / 2
        return transfer * np.exp(1j * wave_y[:, None] * centre_y) * np.exp(1j * wave_x * centre_x)
