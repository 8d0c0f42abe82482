"""The forward operator A and its adjoint Aᴴ.

One FFT of the object serves all shots. It is laid out over unwrapped frequencies (twice the
lattice, footprint included), so that each shot's shift by its nuclear wavevector is a slice;
the sensor wavevector shifts one plane per shot. `apply` and `adjoint` walk the shots in order
and keep one shot's work in memory.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.model import ForwardModel

ComplexArray = NDArray[np.complexfloating]


class ForwardOperator:
    """A: objects (components, nz, ny, nx) to samples (shots, times, channels y, channels x).

    Parameters
    ----------
    model
        The numbers; see `recon.forward.model`.
    dtype
        complex64 or complex128; inputs are cast to it, outputs have it.
    """

    def __init__(self, model: ForwardModel, dtype: type[np.complexfloating] = np.complex64) -> None:
        self.model = model
        self.dtype = np.dtype(dtype)
        encoding = model.encoding
        self.object_shape = (model.components, *model.grid.shape)
        self.sample_shape = (len(encoding), len(model.basis), *model.channels)
        rows, columns = model.footprint()
        self._footprint = (rows[:, None] * columns).astype(self.dtype.char.lower())
        self._basis = model.basis.astype(self.dtype)
        self._basis_is_identity = np.array_equal(model.basis, np.eye(len(model.basis)))
        self._reach = tuple(int(r) for r in np.abs(encoding.sensor).max(axis=0, initial=0))
        if not model.is_one_detector:
            self._transfer = model.detector_transfer(self._reach).astype(self.dtype)  # type: ignore[arg-type]
        self._kernels: dict[tuple[int, float], ComplexArray] = {}

    def apply(self, objects: ComplexArray) -> ComplexArray:
        """A x.

        Raises
        ------
        InputError
            The object's shape is not `object_shape`.
        """
        if objects.shape != self.object_shape:
            raise InputError(
                f"object has shape {objects.shape}, not {self.object_shape}", "operator"
            )
        spectrum = self.object_spectrum(objects)
        samples = np.empty(self.sample_shape, self.dtype)
        for shot, plane in enumerate(self._component_samples(spectrum)):
            samples[shot] = self._mix(plane)
        return samples

    def adjoint(self, samples: ComplexArray) -> ComplexArray:
        """Aᴴ y.

        Raises
        ------
        InputError
            The samples' shape is not `sample_shape`.
        """
        if samples.shape != self.sample_shape:
            raise InputError(
                f"samples have shape {samples.shape}, not {self.sample_shape}", "operator"
            )
        spectrum = self.back_project(enumerate(samples))
        return scipy.fft.ifft2(spectrum, overwrite_x=True)

    def object_spectrum(self, objects: ComplexArray) -> ComplexArray:
        """FFT of the object times the voxel footprint, over unwrapped frequencies.

        (components, nz, ny, nx) to (components, nz, 2 ny, 2 nx), frequencies −N … N − 1.
        """
        spectrum = scipy.fft.fft2(objects.astype(self.dtype, copy=False))
        unwrapped = np.tile(spectrum, (1, 1, 2, 2))
        unwrapped *= self._footprint
        return unwrapped

    def back_project(self, shots: Iterable[tuple[int, ComplexArray]]) -> ComplexArray:
        """Sum of Aᴴ over numbered shots, as an FFT-ordered spectrum (components, nz, ny, nx)."""
        _, ny, nx = self.model.grid.shape
        components, nz = self.object_shape[:2]
        unwrapped = np.zeros((components, nz, 2 * ny, 2 * nx), self.dtype)
        work = np.empty((components, nz, ny, nx), self.dtype)
        for shot, samples in shots:
            mixed = self._unmix(samples)
            if self.model.is_one_detector:
                self._back_project_detector(shot, mixed, unwrapped)
            else:
                self._back_project_camera(shot, mixed, unwrapped, work)
        unwrapped *= self._footprint
        return fold(unwrapped, (ny, nx))

    def response(self, shot: int) -> ComplexArray:
        """What a shot makes of each object frequency: h(κ'), (nz, ny, nx), FFT order.

        Includes kernel, footprint, detector transfer and shot amplitude; for a camera. One
        detector sees a single frequency: `detector_response`.
        """
        encoding = self.model.encoding
        _, ny, nx = self.model.grid.shape
        rows, columns = self._nuclear_slices(shot)
        field = self._kernel(shot) * self._transfer_slice(shot)
        field = field * (self._footprint[rows, columns] * encoding.amplitude[shot]).astype(
            self.dtype
        )
        shift = -(np.array([ny // 2, nx // 2]) + encoding.nuclear[shot])
        return np.roll(field, shift, axis=(-2, -1))

    def detector_response(self, shot: int) -> tuple[ComplexArray, int, int]:
        """What one detector sees: h (nz,) and its object frequency κ' = −q − k, in steps (y, x)."""
        row, column = self._detector_index(shot)
        rows, columns = self._nuclear_slices(shot)
        place = rows.start + row, columns.start + column
        factor = self._footprint[place] * self.model.encoding.amplitude[shot]
        _, ny, nx = self.model.grid.shape
        return self._kernel(shot)[:, row, column] * factor, place[0] - ny, place[1] - nx

    # One shot at a time ------------------------------------------------------------------

    def _component_samples(self, spectrum: ComplexArray) -> Iterator[ComplexArray]:
        """Samples of each component's unit time course, (components, channels y, x) per shot."""
        model, amplitude = self.model, self.model.encoding.amplitude
        _, ny, nx = model.grid.shape
        gain = np.prod(model.channels) / (ny * nx)
        work = np.empty(self.object_shape, self.dtype)
        for shot in range(len(model.encoding)):
            factor = self.dtype.type(gain * amplitude[shot])
            rows, columns = self._nuclear_slices(shot)
            if model.is_one_detector:
                row, column = self._detector_index(shot)
                objects = spectrum[:, :, rows.start + row, columns.start + column]
                value = objects @ self._kernel(shot)[:, row, column]
                yield (factor * value)[:, None, None]
                continue
            np.multiply(spectrum[:, :, rows, columns], self._kernel(shot), out=work)
            field = work.sum(axis=1)
            field *= self._transfer_slice(shot)
            plane = scipy.fft.ifft2(self._to_channels(shot, field), overwrite_x=True)
            plane *= factor
            yield plane

    def _back_project_camera(
        self, shot: int, mixed: ComplexArray, unwrapped: ComplexArray, work: ComplexArray
    ) -> None:
        field = self._from_channels(shot, scipy.fft.fft2(mixed, overwrite_x=True))
        transfer = self._transfer_slice(shot).conj()
        transfer *= self.dtype.type(np.conj(self.model.encoding.amplitude[shot]))
        field *= transfer
        np.conj(field, out=field)
        np.multiply(self._kernel(shot), field[:, None], out=work)
        np.conj(work, out=work)
        rows, columns = self._nuclear_slices(shot)
        unwrapped[:, :, rows, columns] += work

    def _back_project_detector(
        self, shot: int, mixed: ComplexArray, unwrapped: ComplexArray
    ) -> None:
        row, column = self._detector_index(shot)
        rows, columns = self._nuclear_slices(shot)
        kernel = self._kernel(shot)[:, row, column] * self.model.encoding.amplitude[shot]
        value = mixed.reshape(-1, 1) * kernel.conj()
        unwrapped[:, :, rows.start + row, columns.start + column] += value

    def _mix(self, plane: ComplexArray) -> ComplexArray:
        """Φ: components to times."""
        if self._basis_is_identity:
            return plane
        return (self._basis @ plane.reshape(len(plane), -1)).reshape(self.sample_shape[1:])

    def _unmix(self, samples: ComplexArray) -> ComplexArray:
        """Φᴴ: times to components."""
        samples = samples.astype(self.dtype, copy=self._basis_is_identity)
        if self._basis_is_identity:
            return samples
        mixed = self._basis.conj().T @ samples.reshape(len(samples), -1)
        return mixed.reshape(self.object_shape[0], *self.sample_shape[2:])

    # Where things lie --------------------------------------------------------------------

    def _kernel(self, shot: int) -> ComplexArray:
        encoding = self.model.encoding
        key = (int(encoding.sensing_axis[shot]), float(encoding.axial[shot]))
        if key not in self._kernels:
            if len(self._kernels) >= 64:
                self._kernels.pop(next(iter(self._kernels)))
            self._kernels[key] = self.model.kernel(*key).astype(self.dtype)
        return self._kernels[key]

    def _nuclear_slices(self, shot: int) -> tuple[slice, slice]:
        """Where κ_f − k of the grid's own band lies in the unwrapped spectrum."""
        _, ny, nx = self.model.grid.shape
        shift_y, shift_x = (int(m) for m in self.model.encoding.nuclear[shot])
        top, left = ny - ny // 2 - shift_y, nx - nx // 2 - shift_x
        return slice(top, top + ny), slice(left, left + nx)

    def _transfer_slice(self, shot: int) -> ComplexArray:
        """P(κ_f + q) over the grid's own band."""
        _, ny, nx = self.model.grid.shape
        shift_y, shift_x = (int(m) for m in self.model.encoding.sensor[shot])
        top, left = self._reach[0] + shift_y, self._reach[1] + shift_x
        return self._transfer[top : top + ny, left : left + nx]

    def _detector_index(self, shot: int) -> tuple[int, int]:
        """The field frequency κ_f = −q that one detector sees, as indices into the band."""
        _, ny, nx = self.model.grid.shape
        shift_y, shift_x = (int(m) for m in self.model.encoding.sensor[shot])
        row, column = ny // 2 - shift_y, nx // 2 - shift_x
        if not (0 <= row < ny and 0 <= column < nx):
            raise InputError("sensor wavevector lies beyond the grid's band", f"shot {shot}")
        return row, column

    def _channel_shift(self, shot: int) -> tuple[int, int]:
        _, ny, nx = self.model.grid.shape
        shift_y, shift_x = (int(m) for m in self.model.encoding.sensor[shot])
        return shift_y - ny // 2, shift_x - nx // 2

    def _to_channels(self, shot: int, field: ComplexArray) -> ComplexArray:
        """Field band to the channels' FFT order: shift by q, fold onto the pixel lattice."""
        rolled = np.roll(field, self._channel_shift(shot), axis=(-2, -1))
        return fold(rolled, self.model.channels)

    def _from_channels(self, shot: int, spectrum: ComplexArray) -> ComplexArray:
        """The adjoint of `_to_channels`."""
        shift_y, shift_x = self._channel_shift(shot)
        if self.model.binning != (1, 1):
            spectrum = np.tile(spectrum, (1, *self.model.binning))
        return np.roll(spectrum, (-shift_y, -shift_x), axis=(-2, -1))


def fold(spectrum: ComplexArray, shape: tuple[int, int]) -> ComplexArray:
    """Sum a spectrum (…, a·ny, b·nx) over its aliases onto (…, ny, nx)."""
    ny, nx = shape
    tall, wide = spectrum.shape[-2:]
    if (tall, wide) == shape:
        return spectrum
    return spectrum.reshape(*spectrum.shape[:-2], tall // ny, ny, wide // nx, nx).sum(axis=(-4, -2))
