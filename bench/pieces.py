"""The numbers a careful user of a general library composes the operator from.

With one channel per voxel each shot is, in FFT order,

    y_j = IFFT2[ P F_j Σ_z K(κ, z) shift_j X_z ],   X = FFT2 x

one FFT of the object for all shots, one circular shift per shot, K shared by shots with the same
sensing axis and k_z. One detector sees y_j = Σ_z h_j(z) X_z(κ'_j). All whitened and scaled to unit
sensitivity.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from solver_cases import Case

from recon.forward import ForwardOperator
from recon.forward.shot_tables import ShotTables


@dataclass(frozen=True, eq=False)
class Shot:
    """Kernel (nz, ny, nx), filter P·F (ny, nx), shift (y, x)."""

    kernel: np.ndarray
    transfer: np.ndarray
    shift: tuple[int, int]


class Pieces:
    """Shots of a camera, or the rows of one detector, and the whitened samples."""

    def __init__(self, case: Case, unit: np.ndarray) -> None:
        self.model = case.model
        self.shape = self.model.grid.shape
        encoding = self.model.encoding
        self.root = np.sqrt(encoding.weight).astype(np.float32)
        self.factor = np.float32(unit[0])
        self.one_detector = self.model.is_one_detector
        self.alive = None if case.dead is None else (~case.dead).astype(np.float32)
        samples = case.samples[:, 0] * self.root[:, None, None]
        self.y = samples if self.alive is None else samples * self.alive
        self._tables = ShotTables(self.model, np.dtype(np.complex64))

    def shots(self) -> list[Shot]:
        """Of a camera with one pixel per voxel and no sensor gradient."""
        assert self.model.binning == (1, 1)
        assert not self.model.encoding.sensor.any()
        assert np.ptp(self.root) == 0
        rows, columns = self.model.footprint()
        transfer = self.model.detector_transfer((0, 0))
        kernels: dict[tuple[int, float], np.ndarray] = {}
        found = []
        for shot, (top, left) in enumerate(self._tables.windows):
            key = self._tables.keys[shot][:2]
            if key not in kernels:
                kernel = self.model.kernel(*key) * (self.root[0] * self.factor)
                kernels[key] = np.fft.ifftshift(kernel, axes=(-2, -1)).astype(np.complex64)
            both = transfer * rows[top, None] * columns[left]
            both *= self.model.encoding.amplitude[shot]
            place = self.model.encoding.nuclear[shot]
            found.append(
                Shot(
                    kernels[key],
                    np.fft.ifftshift(both).astype(np.complex64),
                    (int(place[0]), int(place[1])),
                )
            )
        return found

    def rows(self) -> tuple[np.ndarray, np.ndarray]:
        """Of one detector: h_j (shots, nz) and the flat place of κ'_j in an orthonormal FFT."""
        _, ny, nx = self.shape
        rows, columns = self.model.footprint()
        responses, places = [], []
        for shot in range(len(self.root)):
            response, row, column = self._tables.detector_response(shot)
            gain = self._tables.gain * rows[row] * columns[column] * np.sqrt(ny * nx)
            responses.append(response * (gain * self.root[shot] * self.factor))
            places.append(((row - ny) % ny) * nx + (column - nx) % nx)
        return np.array(responses, np.complex64), np.array(places)

    def check(self, apply: object) -> float:
        """Relative difference of a composed operator from ours."""
        rng = np.random.default_rng(0)
        x = rng.standard_normal((*self.shape, 2), np.float32).view(np.complex64)[..., 0]
        ours = ForwardOperator(self.model).apply(x[None] * self.factor)[:, 0]
        ours = ours * self.root[:, None, None]
        if self.alive is not None:
            ours = ours * self.alive
        theirs = np.asarray(apply(x)).reshape(ours.shape)  # type: ignore[operator]
        return float(np.linalg.norm(theirs - ours) / np.linalg.norm(ours))
