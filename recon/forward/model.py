"""The numbers of the forward model, gathered once.

Field frequency κ_f, object frequency κ' and channel frequency κ_c of a shot with nuclear
wavevector k and sensor wavevector q are tied by κ' = κ_f − k and κ_c = κ_f + q:

    Y(κ_c) = P(κ_c) Σ_z K_a(κ_f, z) F(κ') X_z(κ'),

with K_a the field kernel of sensing axis a (`recon.physics.dipole.field_kernel`), F the voxel
footprint and P the optical transfer times the pixel footprint, both taken at the *unwrapped*
frequency. Field frequencies beyond the grid's own band are dropped; `neglected_response` says how
much that is.

Arrays here are in monotonic frequency order (−N/2 … N/2 − 1). Tables over unwrapped frequencies
are longer, so that a lattice shift is a slice, not a copy.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.lattice import LatticeEncoding, lattice_steps
from recon.grid import Grid
from recon.instrument import Instrument, OneDetector
from recon.physics.dipole import field_kernel, lateral_footprint, magnetisation_direction
from recon.physics.optics import optical_transfer, pixel_footprint
from recon.protocol import Protocol

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class ForwardModel:
    """Everything A needs: grid, encoding, response, spectral basis, detector.

    Attributes
    ----------
    grid
        The reconstruction grid; its lateral extent is the field of view.
    encoding
        The shots, on the frequency lattice.
    basis
        Spectral basis Φ (times, components): sample at time t of a unit of each component, in
        (A/m) per unit. Species mode: decaying exponentials; cube mode: the identity.
    instrument
        Source of layer, axes, optics.
    binning
        Camera pixel in voxels along (y, x); (ny, nx) for one detector.
    """

    grid: Grid
    encoding: LatticeEncoding
    basis: ComplexArray
    instrument: Instrument
    binning: tuple[int, int]
    _kernels: dict[tuple[int, float], ComplexArray] = field(
        default_factory=dict, repr=False, compare=False
    )

    @classmethod
    def build(
        cls,
        grid: Grid,
        instrument: Instrument,
        protocol: Protocol,
        basis: ComplexArray,
        noise_sd: float,
    ) -> ForwardModel:
        """Put a described experiment on the lattice.

        Parameters
        ----------
        noise_sd
            Standard deviation of a complex sample at one average, tesla.

        Raises
        ------
        InputError
            Field of view, pixel and grid do not fit; a wavevector is off the lattice.
        """
        if not (np.isfinite(noise_sd) and noise_sd > 0):
            raise InputError(f"noise of {noise_sd} T must be positive", "record", "state the noise")
        encoding = LatticeEncoding(
            nuclear=lattice_steps(protocol.nuclear_wavevector[:, :2], grid, "nuclear"),
            sensor=lattice_steps(protocol.sensor_wavevector, grid, "sensor"),
            axial=np.asarray(protocol.nuclear_wavevector[:, 2], float),
            sensing_axis=np.asarray(protocol.sensing_axis, int) - 1,
            amplitude=np.asarray(protocol.amplitude, complex),
            weight=np.asarray(protocol.averages, float) / noise_sd**2,
        )
        return cls(grid, encoding, basis, instrument, detector_binning(grid, instrument))

    def subset(self, shots: slice | NDArray[np.integer]) -> ForwardModel:
        """The model of some of the shots, in the order given."""
        return replace(self, encoding=self.encoding.subset(shots))

    @property
    def is_one_detector(self) -> bool:
        return self.binning == self.grid.shape[1:]

    @property
    def channels(self) -> tuple[int, int]:
        """Number of channels along (y, x)."""
        _, ny, nx = self.grid.shape
        return ny // self.binning[0], nx // self.binning[1]

    @property
    def components(self) -> int:
        return int(self.basis.shape[1])

    @property
    def sample_count(self) -> int:
        """Number of complex samples of the whole record."""
        return len(self.encoding) * len(self.basis) * int(np.prod(self.channels))

    def kernel(self, sensing_axis: int, axial_wavenumber: float) -> ComplexArray:
        """Field kernel on the grid's own band, (nz, ny, nx) complex64, T per (A/m); cached."""
        key = (sensing_axis, axial_wavenumber)
        if key not in self._kernels:
            if len(self._kernels) >= 64:
                self._kernels.pop(next(iter(self._kernels)))
            self._kernels[key] = self._evaluate_kernel(*key)
        return self._kernels[key]

    def _evaluate_kernel(self, sensing_axis: int, axial_wavenumber: float) -> ComplexArray:
        band_y, band_x = (np.arange(-(n // 2), n - n // 2) * s for n, s in self._lattice())
        instrument = self.instrument
        return field_kernel(
            band_y,
            band_x,
            self.grid.heights,
            self.grid.voxel[0],
            instrument.sensing_directions[sensing_axis],
            magnetisation_direction(instrument.bias_direction),
            instrument.depth,
            instrument.thickness,
            axial_wavenumber,
        )

    def footprint(self) -> tuple[FloatArray, FloatArray]:
        """Voxel footprint along (y, x) at unwrapped object frequencies −N … N − 1."""
        rows, columns = (
            lateral_footprint(np.arange(-n, n) * s, edge)
            for (n, s), edge in zip(self._lattice(), self.grid.voxel[1:], strict=True)
        )
        return rows, columns

    def detector_transfer(self, reach: tuple[int, int]) -> ComplexArray:
        """P at unwrapped channel frequencies −N/2 − reach … N/2 − 1 + reach, (ny + 2 r, nx + 2 r).

        The phase puts pixel centres where they are when a pixel spans several voxels.
        """
        instrument, edges = self.instrument, self.grid.voxel[1:]
        wave_y, wave_x = (
            np.arange(-(n // 2) - r, n - n // 2 + r) * s
            for (n, s), r in zip(self._lattice(), reach, strict=True)
        )
        optics = instrument.optics
        transfer = optical_transfer(
            np.hypot(wave_y[:, None], wave_x), optics.numerical_aperture, optics.wavelength
        )
        pixel_y, pixel_x = (b * d for b, d in zip(self.binning, edges, strict=True))
        transfer = transfer * pixel_footprint(wave_y[:, None], wave_x, (pixel_y, pixel_x))
        centre_y, centre_x = ((b - 1) / 2 * d for b, d in zip(self.binning, edges, strict=True))
        phase = np.exp(1j * wave_y[:, None] * centre_y) * np.exp(1j * wave_x * centre_x)
        return transfer * phase

    def neglected_response(self) -> float:
        """Largest kernel magnitude just beyond the grid's band over its largest within it.

        The forward model keeps field frequencies inside the band only, so this bounds the
        relative error that a finer voxel would remove.
        """
        magnitudes = [np.abs(self.kernel(a, 0.0)) for a in np.unique(self.encoding.sensing_axis)]
        stack = np.stack(magnitudes)
        edge = max(stack[..., 0, :].max(), stack[..., :, 0].max())
        return float(edge / stack.max())

    def _lattice(self) -> tuple[tuple[int, float], tuple[int, float]]:
        _, ny, nx = self.grid.shape
        step_y, step_x = self.grid.lattice_step
        return (ny, step_y), (nx, step_x)


def detector_binning(grid: Grid, instrument: Instrument) -> tuple[int, int]:
    """Voxels per camera pixel along (y, x); the whole grid for one detector.

    Raises
    ------
    InputError
        The grid does not span the field of view, or the pixel is no whole number of voxels.
    """
    extent = np.array([n * d for n, d in zip(grid.shape[1:], grid.voxel[1:], strict=True)])
    view = np.asarray(instrument.view)
    if not np.allclose(extent, view, rtol=1e-6):
        raise InputError(
            f"the grid spans {extent[1] * 1e6:g} x {extent[0] * 1e6:g} µm, the field of view "
            f"{view[1] * 1e6:g} x {view[0] * 1e6:g} µm",
            "grid",
            "make them equal",
        )
    if isinstance(instrument.detector, OneDetector):
        return grid.shape[1], grid.shape[2]
    ratio = instrument.pixel / np.array(grid.voxel[1:])
    binning = np.rint(ratio).astype(int)
    fits = np.allclose(ratio, binning, rtol=1e-6) and binning.min() >= 1
    if not fits or any(n % b for n, b in zip(grid.shape[1:], binning, strict=True)):
        raise InputError(
            f"a camera pixel spans {ratio[1]:g} x {ratio[0]:g} voxels",
            "camera.pixel_um",
            "choose voxels that divide the pixel, and whole pixels across the view",
        )
    return int(binning[0]), int(binning[1])
