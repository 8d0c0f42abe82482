"""The operator of a `DiffusingModel`, and the statistics and exact blocks of its records."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.block_matrix import BlockMatrix
from recon.forward.blocks import BlockQuadratic
from recon.forward.diffusing_model import KEPT_BYTES, DiffusingModel, Responses
from recon.forward.layout import Layout
from recon.forward.operator import fold
from recon.forward.statistics import squared_norm
from recon.grid import Grid

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


class DiffusingOperator:
    """A: objects (components, nz, ny, nx) to samples (shots, times, channels y, channels x).

    Parameters
    ----------
    model
        The numbers; see `recon.forward.diffusing_model`.
    dtype
        complex64 or complex128.
    """

    def __init__(
        self, model: DiffusingModel, dtype: type[np.complexfloating] = np.complex64
    ) -> None:
        self.model = model
        self.dtype = np.dtype(dtype)
        self.responses = Responses(model, self.dtype)
        self.object_shape = (model.components, *model.base.grid.shape)
        self.sample_shape = (len(model.group), model.times, *model.base.channels)
        rows, columns = model.base.footprint()
        self.footprint = (rows[:, None] * columns).astype(self.dtype.char.lower())

    def apply(self, objects: ComplexArray) -> ComplexArray:
        """A x.

        Raises
        ------
        InputError
            The object's shape is not `object_shape`.
        """
        _check_shape(objects, self.object_shape, "object")
        spectrum = scipy.fft.fft2(objects.astype(self.dtype, copy=False))
        spectrum = np.tile(spectrum, (1, 1, 2, 2)) * self.footprint
        samples = np.empty(self.sample_shape, self.dtype)
        tables, base = self.responses.tables, self.model.base
        for shot, sample in enumerate(samples):
            *_, rows, columns = self.responses.places(shot)
            field = self.responses.of(shot).fields(spectrum[:, :, rows, columns])
            if base.is_one_detector:
                sample[...] = field * (base.encoding.amplitude[shot] * tables.gain)
                continue
            image = scipy.fft.ifft2(fold(field, base.channels), overwrite_x=True)
            ramp_y, ramp_x = tables.ramps(slice(shot, shot + 1))
            sample[...] = image * (tables.gain * ramp_y[0][:, None] * ramp_x[0])
        return samples

    def adjoint(self, samples: ComplexArray) -> ComplexArray:
        """Aᴴ y.

        Raises
        ------
        InputError
            The samples' shape is not `sample_shape`.
        """
        _check_shape(samples, self.sample_shape, "samples")
        spectrum = self.back_project([(slice(0, len(samples)), samples)])
        return scipy.fft.ifft2(spectrum, overwrite_x=True)

    def back_project(
        self, batches: Iterable[tuple[slice, ComplexArray]], weight: FloatArray | None = None
    ) -> ComplexArray:
        """Sum of w_j A_jᴴ y_j over batches of shots, as an FFT-ordered spectrum of the object."""
        _, ny, nx = self.model.base.grid.shape
        unwrapped = np.zeros((*self.object_shape[:2], 2 * ny, 2 * nx), self.dtype)
        for shots, samples in batches:
            for shot, sample in zip(range(shots.start, shots.stop), samples, strict=True):
                factor = 1.0 if weight is None else float(weight[shot])
                *_, rows, columns = self.responses.places(shot)
                seen = unwrapped[:, :, rows, columns]
                seen += self.responses.of(shot).back(self._field(shot, sample, factor))
        unwrapped *= self.footprint
        return fold(unwrapped, (ny, nx))

    def _field(self, shot: int, sample: ComplexArray, factor: float) -> ComplexArray:
        """The adjoint of the detector without its transfer: (times, cy, cx) to the band."""
        tables, base = self.responses.tables, self.model.base
        sample = sample.astype(self.dtype, copy=False)
        if base.is_one_detector:
            scale = np.conj(base.encoding.amplitude[shot]) * factor
            return np.asarray(sample * self.dtype.type(scale))
        ramp_y, ramp_x = (ramp[0].conj() for ramp in tables.ramps(slice(shot, shot + 1)))
        turned = sample * (self.dtype.type(factor) * ramp_y[:, None] * ramp_x)
        return np.tile(scipy.fft.fft2(turned, overwrite_x=True), (1, *base.binning))


def joint_blocks(operator: DiffusingOperator) -> tuple[Layout, ComplexArray]:
    """Blocks of G = Σ_j w_j Σ_t h_j(t) h_j(t)ᴴ over all components.

    Returns the layout and (q, q, blocks y, blocks x) complex64, q = components · nz, times the
    frequencies that alias onto each other.
    """
    model = operator.model
    base = model.base
    aliased = base.binning != (1, 1) and not base.is_one_detector
    layout = Layout.of(base.grid.shape, base.binning if aliased else (1, 1))
    if aliased:
        return layout, _aliased(operator, layout)
    _, ny, nx = base.grid.shape
    size = model.components * base.grid.shape[0]
    total = np.zeros((2 * ny, 2 * nx, size, size), np.complex64)
    strength = base.encoding.weight * np.abs(base.encoding.amplitude) ** 2
    if base.is_one_detector:
        strength = strength * operator.responses.tables.gain
    unit = np.sqrt(strength.max())  # keeps squares of weak responses within single precision
    groups: dict[object, list[int]] = {}
    for shot in range(len(model.group)):
        groups.setdefault(operator.responses.key(shot), []).append(shot)
    for shots in groups.values():
        product = operator.responses.of(shots[0]).products(unit)
        for shot in shots:
            *_, rows, columns = operator.responses.places(shot)
            place = total[rows, columns]
            gram = operator.responses.of(shot).gram()
            place += product * np.asarray(gram * (strength[shot] / unit**2), np.complex64)
    total *= (operator.footprint**2).astype(np.float32)[:, :, None, None]
    return layout, fold(total.transpose(2, 3, 0, 1), (ny, nx))


def _aliased(operator: DiffusingOperator, layout: Layout) -> ComplexArray:
    """Coarse pixels: object frequencies that alias onto each other share a block."""
    base = operator.model.base
    _, ny, nx = base.grid.shape
    size = layout.block_size * operator.model.components
    normal = np.zeros((*layout.blocks, size, size), np.complex64)
    for shot, weight in enumerate(base.encoding.weight):
        rows, columns = operator.responses.tables.windows[shot]
        gain = operator.responses.tables.gain * weight
        scale = np.sqrt(gain) * np.abs(base.encoding.amplitude[shot])
        seen = operator.responses.of(shot).whole() * (operator.footprint[rows, columns] * scale)
        shift = -(np.array([ny // 2, nx // 2]) + base.encoding.nuclear[shot])
        turned = np.roll(seen.astype(np.complex64), shift, axis=(-2, -1))
        gathered = np.stack([layout.gather(one) for one in turned]).transpose(2, 3, 0, 1)
        normal += np.matmul(gathered.conj().swapaxes(-1, -2), gathered)
    return normal.transpose(2, 3, 0, 1)


def joint_memory(model: DiffusingModel) -> int:
    """Bytes that `accumulate_joint` takes at its peak, roughly: blocks, products, responses."""
    nz, ny, nx = model.base.grid.shape
    size = model.components * nz
    responses = Responses(model, np.dtype(np.complex64))
    shots = range(len(model.group))
    times = 1 if all(responses.alike(shot) for shot in shots) else model.times
    kernel = 8 * times * size * ny * nx
    kinds = len({responses.key(shot) for shot in shots})
    kept = min(KEPT_BYTES, 2 * (kinds - 1) * kernel)
    return 8 * size**2 * ny * nx * 6 + 4 * kernel + kept


@dataclass(frozen=True)
class JointStatistics:
    """As `Statistics`, with all components in one block per coset of object frequencies.

    Attributes
    ----------
    normal
        (components · q, components · q, blocks y, blocks x), components outermost.
    """

    grid: Grid
    layout: Layout
    linear: ComplexArray
    normal: ComplexArray
    energy: float
    samples: int

    @property
    def gram(self) -> ComplexArray:
        """As `spectral_gram`."""
        return self.spectral_gram()

    def __add__(self, other: JointStatistics) -> JointStatistics:
        """Statistics of both sets of shots together."""
        if self.grid != other.grid or self.normal.shape != other.normal.shape:
            raise InputError("statistics of different grids cannot be added", "record")
        return replace(
            self,
            linear=self.linear + other.linear,
            normal=self.normal + other.normal,
            energy=self.energy + other.energy,
            samples=self.samples + other.samples,
        )

    def scaled(self, unit: FloatArray) -> JointStatistics:
        """Statistics for unknowns counted in units of size `unit`, (components,)."""
        factor = np.asarray(unit, np.float32)
        each = np.repeat(factor, len(self.normal) // len(factor))
        normal = self.normal * np.outer(each, each)[:, :, None, None]
        return replace(self, linear=self.linear * factor[:, None, None, None], normal=normal)

    def plane_diagonal(self) -> FloatArray:
        """Mean over the lateral frequencies of G's diagonal, (components, nz)."""
        diagonal = np.einsum("aayx->a", self.normal).real / np.prod(self.layout.blocks)
        components, nz = len(self.linear), self.grid.shape[0]
        return np.asarray(diagonal.reshape(components, -1, nz).mean(axis=1))

    def sensitivity(self) -> FloatArray:
        """Square root of the mean diagonal of G per component: signal-to-noise of one unit."""
        return np.sqrt(self.plane_diagonal().mean(axis=1))

    def spectral_gram(self) -> ComplexArray:
        """G between components, mean over voxels, (components, components)."""
        components = len(self.linear)
        q = len(self.normal) // components
        entries = self.normal.reshape(components, q, components, q, -1)
        return np.asarray(np.einsum("aqbqk->ab", entries) / (q * np.prod(self.layout.blocks)))


class JointBlocks(BlockQuadratic):
    """The exact data term of joint statistics."""

    statistics: JointStatistics  # type: ignore[assignment]

    def __init__(self, statistics: JointStatistics, real: bool = False) -> None:
        super().__init__(statistics, real)  # type: ignore[arg-type]

    def scaled(self, unit: FloatArray) -> JointBlocks:
        """The data term for unknowns counted in units of size `unit`, (components,)."""
        return JointBlocks(self.statistics.scaled(unit), self.real)

    def diagonal(self) -> FloatArray:
        """Mean over the lateral axes of G's diagonal, (components, nz)."""
        return self.statistics.plane_diagonal()

    def _assemble(self) -> tuple[ComplexArray | None, BlockMatrix]:
        normal = self.statistics.normal
        if self.real:
            normal = 0.5 * (normal + self.layout.mirrored(normal).conj())
        return None, self._matrix(normal[None], 1)


def accumulate_joint(
    model: DiffusingModel,
    batches: Iterable[tuple[slice, ComplexArray]],
    progress: Callable[[int], None] | None = None,
) -> JointStatistics:
    """Read a record once.

    Raises
    ------
    InputError
        A sample is NaN or infinite, or a batch has the wrong shape.
    """
    operator = DiffusingOperator(model)
    weight = model.base.encoding.weight
    energy, done = 0.0, 0

    def checked() -> Iterable[tuple[slice, ComplexArray]]:
        nonlocal energy, done
        for shots, samples in batches:
            samples = np.ascontiguousarray(samples, np.complex64)
            _check_shape(samples, (len(samples), *operator.sample_shape[1:]), "samples")
            for shot, one in zip(range(shots.start, shots.stop), samples, strict=True):
                energy += squared_norm(one, shot) * weight[shot]
            yield shots, samples
            done += len(samples)
            if progress is not None:
                progress(done)

    linear = operator.back_project(checked(), weight)
    layout, normal = joint_blocks(operator)
    return JointStatistics(model.base.grid, layout, linear, normal, energy, model.sample_count)


def _check_shape(array: ComplexArray, wanted: tuple[int, ...], what: str) -> None:
    if array.shape != wanted:
        raise InputError(f"{what} has shape {array.shape}, not {wanted}", "operator")
