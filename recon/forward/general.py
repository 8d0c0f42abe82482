"""The general forward operator: any mixture of real channels, patchy layer, free wavevectors.

One shot at a time, so that memory does not grow with the number of shots. Shots on the lattice
share one FFT of the object and shift it by a slice, as in `recon.forward.operator`; a shot off
the lattice winds the object in real space and takes an FFT of its own. Fields are kept in the
order κ = −N/2 … N/2 − 1; the phase this puts on the channels is put right where samples appear,
and drops out of the normal operator.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from copy import copy

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.channels import Channels
from recon.forward.general_model import GeneralModel
from recon.forward.off_lattice import winding
from recon.forward.operator import ForwardOperator, fold
from recon.physics.dipole import lateral_footprint

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

# Bytes that tables per shot may take before they are computed anew each time.
TABLE_BYTES = 2**28


class GeneralOperator:
    """A: objects (components, nz, ny, nx) to samples (shots, times, channels y, channels x).

    Parameters
    ----------
    model
        The measurement; see `recon.forward.general_model`.
    dtype
        complex64 or complex128; inputs are cast to it, outputs have it.
    """

    def __init__(self, model: GeneralModel, dtype: type[np.complexfloating] = np.complex64) -> None:
        self.model = model
        self.dtype = np.dtype(dtype)
        ideal = model.ideal
        self.object_shape = (ideal.components, *model.grid.shape)
        self.sample_shape = (len(model), len(ideal.basis), *model.window.channels)
        self._scale = 1 / np.prod(model.grid.shape[1:]) * np.prod(model.window.pixels)
        self.tables = _Tables(model, self.dtype)
        whole = model.window.channels == model.window.pixels and not ideal.is_one_detector
        exact = whole and model.only_channels
        self._ideal = ForwardOperator(ideal, dtype) if exact else None

    def apply(self, objects: ComplexArray) -> ComplexArray:
        """A x.

        Raises
        ------
        InputError
            The object's shape is not `object_shape`.
        """
        samples = np.empty(self.sample_shape, self.dtype)
        for shot, one in enumerate(self.shots(objects)):
            samples[shot] = one
        return samples

    def shots(self, objects: ComplexArray) -> Iterator[ComplexArray]:
        """A x shot after shot, each (times, channels y, channels x)."""
        source = self._source(objects)
        for shot in range(len(self.model)):
            planes = self._planes(shot, source)
            planes *= self.tables.channel_factor(shot) * self.dtype.type(self._scale)
            basis = self.tables.basis(shot)
            yield (basis @ planes.reshape(len(planes), -1)).reshape(self.sample_shape[1:])

    def with_channels(self, channels: Channels) -> GeneralOperator:
        """The same operator with channels judged anew; it shares the tables."""
        other = copy(self)
        other.model = self.model.with_channels(channels)
        other.tables = copy(self.tables)
        other.tables.model = other.model
        return other

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
        return self.back_project(enumerate(samples))

    def back_project(self, shots: Iterable[tuple[int, ComplexArray]]) -> ComplexArray:
        """Sum of Aᴴ over numbered shots with samples (times, channels y, channels x)."""
        sink = _Sink(self.tables, self.object_shape)
        for shot, samples in shots:
            flat = samples.astype(self.dtype, copy=False).reshape(len(samples), -1)
            planes = (self.tables.basis(shot).conj().T @ flat).reshape(-1, *samples.shape[1:])
            self.back_project_planes(shot, planes, sink)
        return sink.total()

    def back_project_planes(self, shot: int, planes: ComplexArray, sink: _Sink) -> None:
        """Add Aᴴ of samples that are already projected on the components' time courses."""
        factor = self.tables.channel_factor(shot)
        self._back(shot, planes * factor.conj(), sink)

    def normal(self, objects: ComplexArray) -> ComplexArray:
        """Aᴴ W A x, the times summed in closed form."""
        model = self.model
        if self._ideal is not None:
            total = self._ideal.between_channels(objects, model.channels.information)
            return np.tensordot(model.gram(0).astype(self.dtype), total, 1)
        share = (model.channels.information * self._scale).astype(self.dtype.char.lower())
        source, sink = self._source(objects), _Sink(self.tables, self.object_shape)
        common = None if model.courses is not None else model.gram(0).astype(self.dtype)
        for shot, weight in enumerate(model.weight):
            planes = self._planes(shot, source)
            planes *= share * share.dtype.type(weight)
            if common is None:
                planes = np.tensordot(model.gram(shot).astype(self.dtype), planes, 1)
            self._back(shot, planes, sink)
        total = sink.total()
        if common is None or (len(common) == 1 and common[0, 0] == 1):
            return total
        return np.tensordot(common, total, 1)

    def noise(self, random: np.random.Generator) -> ComplexArray:
        """A draw of Aᴴ W n for noise n of the stated variance: its covariance is AᴴWA."""
        model, sink = self.model, _Sink(self.tables, self.object_shape)
        kind = self.dtype.char.lower()
        for shot, weight in enumerate(model.weight):
            shape = (self.object_shape[0], *model.window.channels, 2)
            white = random.standard_normal(shape, kind).view(self.dtype)[..., 0]  # type: ignore[call-overload]
            white *= np.sqrt(0.5 * weight * model.channels.weight).astype(kind)
            root = _root(model.gram(shot)).astype(self.dtype)
            self.back_project_planes(shot, np.tensordot(root, white, 1), sink)
        return sink.total()

    # One shot at a time ------------------------------------------------------------------

    def _source(self, objects: ComplexArray) -> _Source:
        if objects.shape != self.object_shape:
            raise InputError(
                f"object has shape {objects.shape}, not {self.object_shape}", "operator"
            )
        return _Source(self.tables, objects.astype(self.dtype, copy=False))

    def _planes(self, shot: int, source: _Source) -> ComplexArray:
        """What the channels of ideal gain see of each component, up to a phase per channel."""
        field = source.field(shot)
        layer = self.tables.density
        if layer is None:
            field *= self.tables.response(shot)
        else:
            field *= self.tables.winding_response(shot)
            plane = scipy.fft.ifft2(field, overwrite_x=True)
            plane *= layer
            field = scipy.fft.fft2(plane, overwrite_x=True)
            field *= self.tables.transfer(shot)
        window = self.model.window
        return window.crop(scipy.fft.ifft2(fold(field, window.pixels), overwrite_x=True))

    def _back(self, shot: int, planes: ComplexArray, sink: _Sink) -> None:
        """The adjoint of `_planes`, up to a positive factor, into the sum."""
        window = self.model.window
        field = scipy.fft.fft2(window.fill(planes))
        if window.binning != (1, 1):
            field = np.tile(field, (1, *window.binning))
        layer = self.tables.density
        if layer is None:
            field *= self.tables.response(shot).conj()
        else:
            field *= self.tables.transfer(shot).conj()
            plane = scipy.fft.ifft2(field, overwrite_x=True)
            plane *= layer
            field = scipy.fft.fft2(plane, overwrite_x=True)
            field *= self.tables.winding_response(shot).conj()
        sink.add(shot, field)


class _Tables:
    """Numbers per shot, kept while they fit into `TABLE_BYTES`."""

    def __init__(self, model: GeneralModel, dtype: np.dtype[np.complexfloating]) -> None:
        self.model, self.dtype = model, dtype
        grid = model.grid
        bands = [
            np.arange(-(n // 2), n - n // 2) * step
            for n, step in zip(grid.shape[1:], grid.lattice_step, strict=True)
        ]
        self._footprints = [
            lateral_footprint(band - model.nuclear[:, axis, None], grid.voxel[1 + axis])
            for axis, band in enumerate(bands)
        ]
        self.density = None
        if model.layer is not None:
            self.density = model.layer.density.astype(dtype.char.lower())
        plane = int(np.prod(grid.shape[1:])) * dtype.itemsize
        self._room = max(1, TABLE_BYTES // plane)
        self._kernel_room = max(2, TABLE_BYTES // (2 * plane * grid.shape[0]))
        self._responses: dict[int, ComplexArray] = {}
        self._transfers: dict[tuple[float, float], ComplexArray] = {}
        self._kernels: dict[tuple[int, float], tuple[ComplexArray, ComplexArray]] = {}

    def kernels(self, shot: int) -> tuple[ComplexArray, ComplexArray]:
        """K (nz, ny, nx) and its conjugate."""
        encoding = self.model.ideal.encoding
        key = (int(encoding.sensing_axis[shot]), float(encoding.axial[shot]))
        if key not in self._kernels:
            _make_room(self._kernels, self._kernel_room)
            kernel = self.model.ideal.kernel(*key).astype(self.dtype)
            self._kernels[key] = kernel, kernel.conj()
        return self._kernels[key]

    def winding_response(self, shot: int) -> ComplexArray:
        """a F(κ − k), (ny, nx)."""
        rows, columns = (table[shot] for table in self._footprints)
        amplitude = self.model.amplitude[shot]
        return ((amplitude * rows)[:, None] * columns).astype(self.dtype)

    def transfer(self, shot: int) -> ComplexArray:
        """P(κ + q), (ny, nx)."""
        key = (float(self.model.sensor[shot, 0]), float(self.model.sensor[shot, 1]))
        if key not in self._transfers:
            _make_room(self._transfers, self._room)
            self._transfers[key] = self.model.transfer(shot).astype(self.dtype)
        return self._transfers[key]

    def response(self, shot: int) -> ComplexArray:
        """a F(κ − k) P(κ + q), (ny, nx)."""
        if shot not in self._responses:
            _make_room(self._responses, self._room)
            self._responses[shot] = self.winding_response(shot) * self.transfer(shot)
        return self._responses[shot]

    def basis(self, shot: int) -> ComplexArray:
        """Φ (times, components)."""
        model = self.model
        basis = model.ideal.basis if model.courses is None else model.courses[shot]
        return basis.astype(self.dtype)

    def channel_factor(self, shot: int) -> ComplexArray:
        """Gain times the phase that fields in the order −N/2 … leave out, (channels y, x)."""
        window, grid = self.model.window, self.model.grid
        phases = []
        for axis in range(2):
            count, edge = grid.shape[1 + axis], grid.voxel[1 + axis]
            step = self.model.sensor[shot, axis] * edge - 2 * np.pi * (count // 2) / count
            first, channels = window.first[axis], window.channels[axis]
            place = np.arange(first, first + channels) * window.binning[axis]
            phases.append(np.exp(1j * step * place))
        factor = self.model.channels.gain * phases[0][:, None] * phases[1]
        return factor.astype(self.dtype)

    def slices(self, shot: int) -> tuple[slice, slice]:
        """Where κ − k lies in the unwrapped spectrum −N … N − 1."""
        _, ny, nx = self.model.grid.shape
        shift_y, shift_x = (int(m) for m in self.model.ideal.encoding.nuclear[shot])
        top, left = ny - ny // 2 - shift_y, nx - nx // 2 - shift_x
        return slice(top, top + ny), slice(left, left + nx)

    def windings(self, shot: int) -> ComplexArray:
        """exp(i k·ρ), ordering the FFT from −N/2 upwards, (ny, nx)."""
        _, ny, nx = self.model.grid.shape
        _, dy, dx = self.model.grid.voxel
        k_y, k_x = self.model.nuclear[shot]
        return (winding(ny, dy, k_y)[:, None] * winding(nx, dx, k_x)).astype(self.dtype)


class _Source:
    """An object, ready to give the field of any shot."""

    def __init__(self, tables: _Tables, objects: ComplexArray) -> None:
        self._tables, self._objects = tables, objects
        if not tables.model.off_lattice.all():
            self._spectrum = np.tile(scipy.fft.fft2(objects), (1, 1, 2, 2))
        self._work = np.empty_like(objects[:, 0])

    def field(self, shot: int) -> ComplexArray:
        """Σ_z K(κ, z) X_z(κ − k), (components, ny, nx)."""
        if self._tables.model.off_lattice[shot]:
            wound = self._objects * self._tables.windings(shot)
            band = scipy.fft.fft2(wound, overwrite_x=True)
        else:
            rows, columns = self._tables.slices(shot)
            band = self._spectrum[:, :, rows, columns]
        kernel, _ = self._tables.kernels(shot)
        field = kernel[0] * band[:, 0]
        for level in range(1, len(kernel)):
            np.multiply(kernel[level], band[:, level], out=self._work)
            field += self._work
        return field


class _Sink:
    """A sum of back-projected fields."""

    def __init__(self, tables: _Tables, shape: tuple[int, ...]) -> None:
        self._tables = tables
        components, nz, ny, nx = shape
        off = tables.model.off_lattice
        self._objects = np.zeros(shape, tables.dtype) if off.any() else None
        self._unwrapped = None
        if not off.all():
            self._unwrapped = np.zeros((components, nz, 2 * ny, 2 * nx), tables.dtype)
        self._work = np.empty((components, ny, nx), tables.dtype)

    def add(self, shot: int, field: ComplexArray) -> None:
        """Add the adjoint of `_Source.field` of (components, ny, nx)."""
        _, conjugate = self._tables.kernels(shot)
        if self._tables.model.off_lattice[shot]:
            assert self._objects is not None
            band = scipy.fft.ifft2(conjugate * field[:, None], overwrite_x=True)
            band *= self._tables.windings(shot).conj()
            self._objects += band
            return
        assert self._unwrapped is not None
        rows, columns = self._tables.slices(shot)
        for level in range(len(conjugate)):
            np.multiply(conjugate[level], field, out=self._work)
            self._unwrapped[:, level, rows, columns] += self._work

    def total(self) -> ComplexArray:
        """The sum, (components, nz, ny, nx)."""
        if self._unwrapped is None:
            assert self._objects is not None
            return self._objects
        _, _, tall, wide = self._unwrapped.shape
        folded = fold(self._unwrapped, (tall // 2, wide // 2))
        total: ComplexArray = scipy.fft.ifft2(folded, overwrite_x=True)
        return total if self._objects is None else total + self._objects


def _root(gram: ComplexArray) -> ComplexArray:
    """R with R Rᴴ = gram, for a gram matrix that may be singular."""
    values, vectors = np.linalg.eigh(gram)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0)))


def _make_room(table: dict, room: int) -> None:  # type: ignore[type-arg]
    if len(table) >= room:
        table.pop(next(iter(table)))
