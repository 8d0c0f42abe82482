"""What each shot multiplies with, laid out so that a shift is a slice or a phase ramp.

A nuclear wavevector picks a window of the unwrapped object spectrum. A sensor wavevector turns
the image by a phase ramp, which also undoes the monotonic frequency order.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.model import ForwardModel

ComplexArray = NDArray[np.complexfloating]
Window = tuple[slice, slice]

# With at most this many different responses, each is kept with the detector transfer in it.
FEW = 24


class ShotTables:
    """Windows, responses and ramps of a model's shots.

    Parameters
    ----------
    model
        The numbers.
    dtype
        Of the tables, complex64 or complex128.
    """

    def __init__(self, model: ForwardModel, dtype: np.dtype[np.complexfloating]) -> None:
        self.model, self.dtype = model, dtype
        encoding = model.encoding
        _, ny, nx = model.grid.shape
        tops = ny - ny // 2 - encoding.nuclear[:, 0]
        lefts = nx - nx // 2 - encoding.nuclear[:, 1]
        self.windows: list[Window] = [
            (slice(int(t), int(t) + ny), slice(int(left), int(left) + nx))
            for t, left in zip(tops, lefts, strict=True)
        ]
        self.keys = [
            (int(axis), float(axial), int(y), int(x))
            for axis, axial, (y, x) in zip(
                encoding.sensing_axis, encoding.axial, encoding.sensor, strict=True
            )
        ]
        self.fused = not model.is_one_detector and len(set(self.keys)) <= FEW
        self._reach = tuple(int(r) for r in np.abs(encoding.sensor).max(axis=0, initial=0))
        self._responses: dict[object, tuple[ComplexArray, ComplexArray]] = {}

    @property
    def gain(self) -> float:
        """Channels over voxels: what inverse transforms of different lengths leave."""
        return float(np.prod(self.model.channels) / np.prod(self.model.grid.shape[1:]))

    @cached_property
    def _transfer(self) -> ComplexArray:
        reach = (self._reach[0], self._reach[1])
        return self.model.detector_transfer(reach).astype(self.dtype)

    def transfer(self, shot: int) -> ComplexArray:
        """P(κ_f + q) over the grid's own band, (ny, nx)."""
        _, ny, nx = self.model.grid.shape
        shift_y, shift_x = self.keys[shot][2:]
        top, left = self._reach[0] + shift_y, self._reach[1] + shift_x
        return self._transfer[top : top + ny, left : left + nx]

    def response(self, shot: int) -> tuple[ComplexArray, ComplexArray]:
        """Field kernel (nz, ny, nx), with the detector transfer if `fused`, and its conjugate."""
        key = self.keys[shot] if self.fused else self.keys[shot][:2]
        if key not in self._responses:
            if len(self._responses) >= 2 * FEW:
                self._responses.pop(next(iter(self._responses)))
            kernel = self.model.kernel(*self.keys[shot][:2]).astype(self.dtype)
            if self.fused:
                kernel = kernel * self.transfer(shot)
            self._responses[key] = kernel, kernel.conj()
        return self._responses[key]

    def ramps(self, shots: slice) -> tuple[ComplexArray, ComplexArray]:
        """Phase ramps (n, cy) and (n, cx) of an image; the first carries the amplitude."""
        encoding = self.model.encoding
        sides = []
        for axis in range(2):
            count = self.model.channels[axis]
            shift = encoding.sensor[shots, axis] - self.model.grid.shape[1 + axis] // 2
            turns = np.outer(shift, np.arange(count)) % count / count
            sides.append(np.exp(2j * np.pi * turns))
        sides[0] *= encoding.amplitude[shots, None]
        return sides[0].astype(self.dtype), sides[1].astype(self.dtype)

    @cached_property
    def _signs(self) -> NDArray[np.floating] | None:
        """What the ramps of all shots have in common where it is real, (cy, cx); else None.

        Without a sensor gradient a ramp only centres the band: alternating signs.
        """
        encoding = self.model.encoding
        if encoding.sensor.any() or np.iscomplex(encoding.amplitude).any():
            return None
        sides = [
            np.exp(-2j * np.pi * (size // 2 * np.arange(count) % count / count))
            for size, count in zip(self.model.grid.shape[1:], self.model.channels, strict=True)
        ]
        signs = sides[0][:, None] * sides[1]
        real = np.abs(signs.imag).max() < 1e-9
        return signs.real.astype(self.dtype.char.lower()) if real else None

    def turned(
        self, planes: ComplexArray, shots: slice, factor: NDArray[np.floating], back: bool = False
    ) -> ComplexArray:
        """Images (n, components, cy, cx) times the shots' ramps and a factor each.

        `back` takes the conjugate, for the adjoint.
        """
        if self._signs is not None:
            size = factor * self.model.encoding.amplitude[shots].real
            whole = self._signs * size.astype(self._signs.dtype)[:, None, None]
            return planes * whole[:, None]
        ramp_y, ramp_x = self.ramps(shots)
        if back:
            ramp_y, ramp_x = ramp_y.conj(), ramp_x.conj()
        ramp_y *= factor[:, None].astype(ramp_y.real.dtype)
        planes = planes * ramp_y[:, None, :, None]
        planes *= ramp_x[:, None, None, :]
        return planes

    def detector_place(self, shot: int) -> tuple[int, int]:
        """The field frequency κ_f = −q that one detector sees, as indices into the band."""
        _, ny, nx = self.model.grid.shape
        shift_y, shift_x = self.keys[shot][2:]
        row, column = ny // 2 - shift_y, nx // 2 - shift_x
        if not (0 <= row < ny and 0 <= column < nx):
            raise InputError("sensor wavevector lies beyond the grid's band", f"shot {shot}")
        return row, column

    def detector_response(self, shot: int) -> tuple[ComplexArray, int, int]:
        """What one detector sees without footprint: h (nz,), and its place in the unwrapped
        spectrum (row, column)."""
        row, column = self.detector_place(shot)
        rows, columns = self.windows[shot]
        values = self.response(shot)[0][:, row, column]
        values = values * self.dtype.type(self.model.encoding.amplitude[shot])
        return values, rows.start + row, columns.start + column
