"""A measurement as it really was: the ideal model and everything that breaks its blocks.

With shot j, channel c at p_c, and κ over the field frequencies of the object's grid,

    y_jc(t) = g_c a_j Σ_s φ_js(t) Σ_κ P(κ + q_j) e^{i(κ + q_j)·p_c} (D B_js)^(κ)
    B̂_js(κ) = F(κ − k_j) Σ_z K_j(κ, z) FFT[e^{i k_j·ρ} x_sz](κ)

k_j and q_j need not lie on the lattice, D is the density of the sensor layer, g_c the channel's
gain; channels are those of the view, which may be smaller than the grid.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.channels import Channels, LayerDensity
from recon.forward.lattice import LatticeEncoding
from recon.forward.model import ForwardModel
from recon.forward.off_lattice import EXACT, middle_phase, nearest_steps
from recon.forward.wide import Window
from recon.grid import Grid
from recon.instrument import Instrument
from recon.physics.optics import optical_transfer, pixel_footprint
from recon.protocol import Protocol

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class GeneralModel:
    """Everything the general operator needs.

    Attributes
    ----------
    ideal
        The nearest model whose normal operator is made of blocks: wavevectors on the lattice,
        ideal channels over the whole grid.
    amplitude
        Amplitude of every shot for phases that are zero at the grid's first voxel, (shots,).
    nuclear, sensor
        Wavevectors k and q along (y, x), rad/m, (shots, 2).
    off_lattice
        Whether k lies off the lattice, (shots,).
    window
        Which pixels exist.
    channels
        Their gain and weight.
    margin
        Voxels (y, x) from the grid's first to the view's first.
    layer
        Density of the sensor layer, or None.
    courses
        Spectral bases of their own for every shot, (shots, times, components), or None.
    """

    ideal: ForwardModel
    amplitude: ComplexArray
    nuclear: FloatArray
    sensor: FloatArray
    off_lattice: NDArray[np.bool_]
    window: Window
    channels: Channels
    margin: tuple[int, int] = (0, 0)
    layer: LayerDensity | None = None
    courses: ComplexArray | None = None

    @classmethod
    def build(
        cls,
        grid: Grid,
        instrument: Instrument,
        protocol: Protocol,
        basis: ComplexArray,
        noise_sd: float,
        *,
        channels: Channels | None = None,
        layer: LayerDensity | None = None,
        margin: tuple[int, int] = (0, 0),
        courses: ComplexArray | None = None,
    ) -> GeneralModel:
        """Gather a measurement.

        Parameters
        ----------
        grid
            The object's grid; it may be wider than the view.
        basis
            Φ (times, components); where `courses` are given, what the shots have in common.
        noise_sd
            Standard deviation of a complex sample of an ideal channel at one average, tesla.
        channels, layer, margin, courses
            See the attributes; ideal by default.

        Raises
        ------
        InputError
            View, pixels and grid do not fit; a map has the wrong shape; a wavevector is beyond
            the grid's Nyquist wavenumber.
        """
        if not (np.isfinite(noise_sd) and noise_sd > 0):
            raise InputError(f"noise of {noise_sd} T must be positive", "record", "state the noise")
        window = Window.of(grid, instrument, margin)
        channels = Channels.ideal(window.channels) if channels is None else channels
        _check_maps(grid, window, channels, layer)
        k, q = protocol.nuclear_wavevector[:, :2], protocol.sensor_wavevector
        nuclear_steps, nuclear_rest = nearest_steps(k, grid, "nuclear", bounded=True)
        sensor_steps, _ = nearest_steps(q, grid, "sensor", bounded=False)
        first = np.array(margin) * np.array(grid.voxel[1:])
        amplitude = protocol.amplitude * np.exp(-1j * ((k + q)[:, ::-1] @ first))
        encoding = LatticeEncoding(
            nuclear=nuclear_steps,
            sensor=sensor_steps,
            axial=np.asarray(protocol.nuclear_wavevector[:, 2], float),
            sensing_axis=np.asarray(protocol.sensing_axis, int) - 1,
            amplitude=amplitude * middle_phase(nuclear_rest, grid),
            weight=np.asarray(protocol.averages, float) / noise_sd**2,
        )
        _check_courses(courses, (len(encoding), *basis.shape))
        return cls(
            ideal=ForwardModel(grid, encoding, basis, instrument, window.binning),
            amplitude=amplitude,
            nuclear=np.ascontiguousarray(k[:, ::-1]),
            sensor=np.ascontiguousarray(q[:, ::-1]),
            off_lattice=np.asarray(nuclear_rest.any(axis=1)),
            window=window,
            channels=channels,
            margin=margin,
            layer=layer,
            courses=courses,
        )

    def __len__(self) -> int:
        return len(self.amplitude)

    @property
    def grid(self) -> Grid:
        """The object's grid."""
        return self.ideal.grid

    @property
    def weight(self) -> FloatArray:
        """Inverse noise variance of the shots, (shots,), 1/T²."""
        return self.ideal.encoding.weight

    @property
    def sample_count(self) -> int:
        """Number of complex samples that carry weight."""
        used = int(np.count_nonzero(self.weight))
        return used * len(self.ideal.basis) * self.channels.alive

    @property
    def only_channels(self) -> bool:
        """Nothing but single channels differs from the ideal model."""
        free = self.off_lattice.any() or self.sensor_off_lattice
        return self.layer is None and self.courses is None and not free

    @property
    def sensor_off_lattice(self) -> bool:
        """Some q lies off the lattice, so that the optics sees frequencies between its points."""
        steps = self.sensor / np.array(self.grid.lattice_step)
        return bool((np.abs(steps - np.rint(steps)) > EXACT).any())

    @property
    def mean_information(self) -> float:
        """Mean of |g|² v over all pixels of the object's grid, times the mean squared density."""
        mean = float(self.channels.information.sum() / np.prod(self.window.pixels))
        return mean if self.layer is None else mean * float((self.layer.density**2).mean())

    def with_channels(self, channels: Channels) -> GeneralModel:
        """The same measurement with channels judged anew."""
        _check_maps(self.grid, self.window, channels, self.layer)
        return replace(self, channels=channels)

    def subset(self, shots: slice | NDArray[np.integer]) -> GeneralModel:
        """The model of some of the shots, in the order given: for shots that are missing."""
        return replace(
            self,
            ideal=self.ideal.subset(shots),
            amplitude=self.amplitude[shots],
            nuclear=self.nuclear[shots],
            sensor=self.sensor[shots],
            off_lattice=self.off_lattice[shots],
            courses=None if self.courses is None else self.courses[shots],
        )

    def gram(self, shot: int) -> ComplexArray:
        """Φᴴ Φ of one shot, (components, components)."""
        basis = self.ideal.basis if self.courses is None else self.courses[shot]
        return np.asarray(basis.conj().T @ basis)

    def mean_gram(self) -> ComplexArray:
        """Φᴴ Φ averaged over the shots by their weights and |amplitude|²."""
        if self.courses is None:
            return self.gram(0)
        share = self.weight * np.abs(self.amplitude) ** 2
        total = np.einsum("j,jta,jtb->ab", share, self.courses.conj(), self.courses)
        return np.asarray(total / max(share.sum(), np.finfo(float).tiny))

    def transfer(self, shot: int) -> ComplexArray:
        """P(κ + q) with the phase of pixel centres, κ in the grid's band from −N/2, (ny, nx)."""
        instrument, grid = self.ideal.instrument, self.grid
        wave_y, wave_x = (
            np.arange(-(n // 2), n - n // 2) * step + q
            for n, step, q in zip(grid.shape[1:], grid.lattice_step, self.sensor[shot], strict=True)
        )
        edges = np.asarray(instrument.pixel)
        transfer = pixel_footprint(wave_y[:, None], wave_x, instrument.pixel)
        first = (edges - grid.voxel[1:]) / 2
        if instrument.camera is not None:
            optics = instrument.optics
            radius = np.hypot(wave_y[:, None], wave_x)
            transfer = transfer * optical_transfer(
                radius, optics.numerical_aperture, optics.wavelength
            )
        else:
            first = first + np.array(self.margin) * grid.voxel[1:]
        return transfer * np.exp(1j * wave_y * first[0])[:, None] * np.exp(1j * wave_x * first[1])


def _check_courses(courses: ComplexArray | None, shape: tuple[int, ...]) -> None:
    if courses is not None and courses.shape != shape:
        raise InputError(f"courses have shape {courses.shape}, not {shape}", "sample times")


def _check_maps(grid: Grid, window: Window, channels: Channels, layer: LayerDensity | None) -> None:
    if channels.shape != window.channels:
        raise InputError(
            f"channel maps have shape {channels.shape}, the camera {window.channels}", "channels"
        )
    if layer is not None and layer.density.shape != grid.shape[1:]:
        raise InputError(
            f"density has shape {layer.density.shape}, the object's grid {grid.shape[1:]}",
            "sensor layer",
        )
