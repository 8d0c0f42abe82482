"""The forward operator A and its adjoint Aᴴ.

One FFT of the object serves all shots. It is laid out over unwrapped frequencies (twice the
lattice, footprint included), so that each shot's shift by its nuclear wavevector is a slice;
the sensor wavevector turns the image by a phase ramp. `apply` and `adjoint` walk the shots in
order and keep a small batch of images in memory.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.model import ForwardModel
from recon.forward.shot_tables import ShotTables

ComplexArray = NDArray[np.complexfloating]

BATCH_BYTES = 1 << 19
"""Images transformed at once: a batch that stays in the processor's cache."""


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
        self.tables = ShotTables(model, self.dtype)
        self.object_shape = (model.components, *model.grid.shape)
        self.sample_shape = (len(model.encoding), len(model.basis), *model.channels)
        rows, columns = model.footprint()
        self.footprint = (rows[:, None] * columns).astype(self.dtype.char.lower())
        self._basis = model.basis.astype(self.dtype)
        self._basis_is_identity = np.array_equal(model.basis, np.eye(len(model.basis)))

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
        images = self._detector_values if self.model.is_one_detector else self._images
        for shots, planes in images(spectrum):
            if self._basis_is_identity:
                samples[shots] = planes
                continue
            flat = planes.reshape(*planes.shape[:2], -1)
            np.matmul(
                self._basis, flat, out=samples[shots].reshape(len(flat), len(self._basis), -1)
            )
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
        spectrum = self.back_project([(slice(0, len(samples)), samples)])
        return scipy.fft.ifft2(spectrum, overwrite_x=True)

    def object_spectrum(self, objects: ComplexArray) -> ComplexArray:
        """FFT of the object times the voxel footprint, over unwrapped frequencies.

        (components, nz, ny, nx) to (components, nz, 2 ny, 2 nx), frequencies −N … N − 1.
        """
        spectrum = scipy.fft.fft2(objects.astype(self.dtype, copy=False))
        unwrapped = np.tile(spectrum, (1, 1, 2, 2))
        unwrapped *= self.footprint
        return unwrapped

    def back_project(
        self,
        batches: Iterable[tuple[slice, ComplexArray]],
        weight: NDArray[np.floating] | None = None,
    ) -> ComplexArray:
        """Sum of w_j A_jᴴ y_j over batches of shots, as an FFT-ordered spectrum of the object.

        Batches are pairs (shots, samples (n, times, channels y, channels x)).
        """
        _, ny, nx = self.model.grid.shape
        components, nz = self.object_shape[:2]
        unwrapped = np.zeros((components, nz, 2 * ny, 2 * nx), self.dtype)
        project = self._back_detector if self.model.is_one_detector else self._back_images
        for shots, samples in batches:
            for part in self._parts(shots.start, shots.stop):
                inside = samples[part.start - shots.start : part.stop - shots.start]
                project(part, self._unmixed(inside), weight, unwrapped)
        unwrapped *= self.footprint
        return fold(unwrapped, (ny, nx))

    def between_channels(self, objects: ComplexArray, share: NDArray[np.floating]) -> ComplexArray:
        """Σ_j w_j A_jᴴ diag(share) A_j x of a camera, for unit time courses.

        `share` (channels y, channels x) is what each channel counts; the components keep apart.
        """
        unwrapped = np.zeros((*self.object_shape[:2], *self.footprint.shape), self.dtype)
        counted = share.astype(self.dtype.char.lower())
        for part, planes in self._images(self.object_spectrum(objects)):
            planes *= counted
            self._back_images(part, planes, self.model.encoding.weight, unwrapped)
        unwrapped *= self.footprint
        return scipy.fft.ifft2(fold(unwrapped, self.object_shape[2:]), overwrite_x=True)

    # Several shots at a time --------------------------------------------------------------

    def _parts(self, start: int, stop: int) -> Iterator[slice]:
        """Slices of shots whose images fit the batch."""
        image = self.model.components * np.prod(self.model.grid.shape[1:]) * self.dtype.itemsize
        size = max(1, int(BATCH_BYTES // image))
        for first in range(start, stop, size):
            yield slice(first, min(first + size, stop))

    def _images(self, spectrum: ComplexArray) -> Iterator[tuple[slice, ComplexArray]]:
        """Images of each component's unit time course, (shots, components, cy, cx)."""
        tables = self.tables
        work = np.empty(self.object_shape, self.dtype)
        for part in self._parts(0, len(self.model.encoding)):
            shape = (part.stop - part.start, len(work), *work.shape[2:])
            fields = np.empty(shape, self.dtype)
            for field, shot in zip(fields, range(part.start, part.stop), strict=True):
                rows, columns = tables.windows[shot]
                np.multiply(spectrum[:, :, rows, columns], tables.response(shot)[0], out=work)
                np.add.reduce(work, axis=1, out=field)
                if not tables.fused:
                    field *= tables.transfer(shot)
            planes = scipy.fft.ifft2(fold(fields, self.model.channels), overwrite_x=True)
            yield part, tables.turned(planes, part, np.full(len(planes), tables.gain))

    def _back_images(
        self,
        shots: slice,
        planes: ComplexArray,
        weight: NDArray[np.floating] | None,
        unwrapped: ComplexArray,
    ) -> None:
        """Add the adjoint of `_images` for images (shots, components, cy, cx) to a spectrum."""
        tables = self.tables
        factor = np.ones(len(planes)) if weight is None else weight[shots]
        planes = tables.turned(planes, shots, factor, back=True)
        fields = scipy.fft.fft2(planes, overwrite_x=True)
        if self.model.binning != (1, 1):
            fields = np.tile(fields, (1, 1, *self.model.binning))
        work = np.empty(self.object_shape, self.dtype)
        for field, shot in zip(fields, range(shots.start, shots.stop), strict=True):
            if not tables.fused:
                field *= tables.transfer(shot).conj()
            np.multiply(tables.response(shot)[1], field[:, None], out=work)
            rows, columns = tables.windows[shot]
            seen = unwrapped[:, :, rows, columns]
            seen += work

    def _detector_values(self, spectrum: ComplexArray) -> Iterator[tuple[slice, ComplexArray]]:
        """Samples of one detector, (1, components, 1, 1) per shot."""
        gain = self.dtype.type(self.tables.gain)
        for shot in range(len(self.model.encoding)):
            response, row, column = self.tables.detector_response(shot)
            value = spectrum[:, :, row, column] @ (response * gain)
            yield slice(shot, shot + 1), value[None, :, None, None]

    def _back_detector(
        self,
        shots: slice,
        planes: ComplexArray,
        weight: NDArray[np.floating] | None,
        unwrapped: ComplexArray,
    ) -> None:
        for plane, shot in zip(planes, range(shots.start, shots.stop), strict=True):
            response, row, column = self.tables.detector_response(shot)
            if weight is not None:
                response = response * response.real.dtype.type(weight[shot])
            unwrapped[:, :, row, column] += plane.reshape(-1, 1) * response.conj()

    def _unmixed(self, samples: ComplexArray) -> ComplexArray:
        """Φᴴ: samples (shots, times, cy, cx) to images (shots, components, cy, cx)."""
        samples = samples.astype(self.dtype, copy=False)
        if self._basis_is_identity:
            return samples
        flat = samples.reshape(*samples.shape[:2], -1)
        mixed = np.matmul(self._basis.conj().T, flat)
        return mixed.reshape(len(samples), -1, *samples.shape[2:])


def fold(spectrum: ComplexArray, shape: tuple[int, int]) -> ComplexArray:
    """Sum a spectrum (…, a·ny, b·nx) over its aliases onto (…, ny, nx)."""
    ny, nx = shape
    tall, wide = spectrum.shape[-2:]
    if (tall, wide) == shape:
        return spectrum
    split = spectrum.reshape(*spectrum.shape[:-2], tall // ny, ny, wide // nx, nx)
    return split.sum(axis=(-4, -2))
