"""Frames to complex samples: least squares in every window, with lines that span the whole shot.

The normalised frames y_f of one channel and shot are modelled as

    y = Σ_m 1_m(f) [c_m + d_m f + Re B_m cos θ_f + Im B_m sin θ_f] + Σ_k u_k l_k(t_f) + noise,

θ_f = 2π f₀ t_f: a level, a slope and a complex sample per window m, and lines l_k (the calibration
tone, mains pickup) of free amplitude and phase over the shot. Least squares rejects the image
exactly, whatever the alias, and is indifferent to slow drift. With P_m the pseudo-inverse of a
window's four columns, M what windows cannot explain, and L the lines,

    u = (Lᵀ M L)⁻¹ Lᵀ M y,    B = P (y − L u).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.counts.acquisition import Acquisition
from recon.errors import InputError
from recon.instrument import Instrument
from recon.protocol import Protocol

FloatArray = NDArray[np.floating]
Frames = NDArray[np.float32]
ComplexArray = NDArray[np.complexfloating]

DISTINCT = 0.01
"""Share of a line that must remain when windows and other lines have explained what they can."""


@dataclass(frozen=True)
class Line:
    """A line over the whole shot: what it is, and its frequency among the frames, Hz."""

    name: str
    frequency: float


@dataclass(frozen=True, eq=False)
class Demodulator:
    """The linear map from frames to samples and lines, the same for every shot and channel.

    Attributes
    ----------
    quadratures
        The rows of P that give samples, float32 (windows, 2, frames per window).
    lines
        What the lines are.
    to_lines
        (Lᵀ M L)⁻¹ Lᵀ M, float32 (2 lines, frames); cosine before sine.
    leakage
        P L, float32 (windows · 2, 2 lines).
    level
        Basis of each window, float64 (windows, frames per window, 4).
    unexplained
        M, float32 (windows, frames per window, frames per window).
    line_columns
        L, float32 (frames, 2 lines).
    noise_factor
        E|n|² of a sample over the variance of a frame, mean over the windows.
    line_variance
        Variance of each line's two amplitudes over that of a frame, (2 lines,).
    """

    quadratures: Frames
    lines: tuple[Line, ...]
    to_lines: Frames
    leakage: Frames
    level: FloatArray
    unexplained: Frames
    line_columns: Frames
    noise_factor: float
    line_variance: FloatArray

    @classmethod
    def build(
        cls,
        acquisition: Acquisition,
        instrument: Instrument,
        protocol: Protocol,
        lines: Sequence[Line] = (),
    ) -> Demodulator:
        """Work out the map.

        Raises
        ------
        InputError
            A line cannot be told from the samples or from another line.
        """
        angle = acquisition.frame_angles(instrument, protocol)
        level = window_columns(angle)
        inverse = np.linalg.pinv(level)
        columns = line_columns(lines, acquisition, protocol)
        windows, frames = angle.shape
        shaped = columns.reshape(windows, frames, -1)
        rest = shaped - level @ (inverse @ shaped)
        rest = rest.reshape(windows * frames, -1)
        normal = rest.T @ rest
        remains = remaining_share(normal, columns)
        if len(lines) and remains < DISTINCT:
            raise _blended(lines, normal, columns)
        to_lines = np.linalg.solve(normal, rest.T) if len(lines) else rest.T
        leakage = (inverse[:, 2:] @ shaped).reshape(2 * windows, -1)
        variance = np.linalg.inv(normal) if len(lines) else normal
        own = np.linalg.inv(np.swapaxes(level, 1, 2) @ level)[:, (2, 3), (2, 3)].sum()
        extra = float(np.einsum("wk,kl,wl->", leakage, variance, leakage))
        return cls(
            np.ascontiguousarray(inverse[:, 2:], np.float32),
            tuple(lines),
            np.ascontiguousarray(to_lines, np.float32),
            np.ascontiguousarray(leakage, np.float32),
            level,
            np.asarray(np.eye(frames) - level @ inverse, np.float32),
            columns.astype(np.float32),
            (own + extra) / windows,
            np.asarray(np.diag(variance)),
        )

    def apply(self, frames: Frames) -> tuple[ComplexArray, ComplexArray]:
        """Samples (windows, channels) and line amplitudes (lines, channels), complex64.

        A line is Re[u exp(−i 2π f t)], as samples are; `frames` is float32 (frames, channels).
        """
        sums = self.begin(frames.shape[1])
        self.add(slice(0, len(self.quadratures)), frames, sums)
        return self.finish(sums)

    def begin(self, channels: int) -> tuple[Frames, Frames]:
        """Empty quadratures (windows, 2, channels) and line sums, for `add`."""
        windows = len(self.quadratures)
        return (
            np.empty((windows, 2, channels), np.float32),
            np.zeros((2 * len(self.lines), channels), np.float32),
        )

    def add(self, windows: slice, frames: Frames, sums: tuple[Frames, Frames]) -> None:
        """Enter the frames of some windows, (frames, channels)."""
        parts, found = sums
        per_window = self.quadratures.shape[2]
        shaped = frames.reshape(-1, per_window, frames.shape[1])
        np.matmul(self.quadratures[windows], shaped, out=parts[windows])
        if self.lines:
            those = slice(windows.start * per_window, windows.stop * per_window)
            found += self.to_lines[:, those] @ frames

    def finish(self, sums: tuple[Frames, Frames]) -> tuple[ComplexArray, ComplexArray]:
        """What `apply` gives, once all windows are entered."""
        parts, found = sums
        amplitudes = np.empty((len(self.lines), parts.shape[2]), np.complex64)
        if self.lines:
            parts -= (self.leakage @ found).reshape(parts.shape)
            amplitudes.real, amplitudes.imag = found[0::2], found[1::2]
        samples = np.empty((len(parts), parts.shape[2]), np.complex64)
        samples.real, samples.imag = parts[:, 0], parts[:, 1]
        return samples, amplitudes

    def residuals(self, frames: Frames) -> Frames:
        """What neither samples nor lines explain, (frames, channels)."""
        windows, per_window, _ = self.level.shape
        left = frames - self.line_columns @ (self.to_lines @ frames) if self.lines else frames
        shaped = left.reshape(windows, per_window, -1)
        return np.asarray((self.unexplained @ shaped).reshape(frames.shape))

    @property
    def freedom(self) -> int:
        """Frames of a shot less fitted parameters: what residuals are divided by."""
        windows, per_window, fitted = self.level.shape
        return windows * (per_window - fitted) - 2 * len(self.lines)


def window_columns(angle: FloatArray) -> FloatArray:
    """Level, slope, cosine and sine of every window, (windows, frames per window, 4)."""
    frames = angle.shape[1]
    slope = np.broadcast_to(np.linspace(-1, 1, frames), angle.shape)
    return np.stack([np.ones_like(angle), slope, np.cos(angle), np.sin(angle)], axis=-1)


def line_columns(
    lines: Sequence[Line], acquisition: Acquisition, protocol: Protocol
) -> NDArray[np.float64]:
    """Cosine and sine of every line at the frames, (frames, 2 lines)."""
    times = acquisition.frame_times(protocol).ravel()
    columns = np.empty((times.size, 2 * len(lines)))
    for place, line in enumerate(lines):
        turns = line.frequency * times
        angle = 2 * np.pi * (turns - np.floor(turns))
        columns[:, 2 * place], columns[:, 2 * place + 1] = np.cos(angle), np.sin(angle)
    return columns


def remaining_share(normal: FloatArray, columns: FloatArray) -> float:
    """Least share of any mixture of lines that windows and the other lines do not explain."""
    return float(np.sqrt(max(shares(normal, columns)[0][0], 0))) if normal.size else 1.0


def shares(normal: FloatArray, columns: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Eigenvalues and vectors of the lines' normal matrix relative to the lines' own size."""
    whole = np.sqrt((columns**2).sum(axis=0))
    values, vectors = np.linalg.eigh(normal / np.maximum(np.outer(whole, whole), 1e-30))
    return values, vectors


def _blended(lines: Sequence[Line], normal: FloatArray, columns: FloatArray) -> InputError:
    line = lines[int(np.argmax(np.abs(shares(normal, columns)[1][:, 0]))) // 2]
    return InputError(
        f"{line.name} at {line.frequency:.6g} Hz cannot be told from the samples or another "
        "line among these frames",
        "acquisition",
        "move it, take more frames per window, or leave it out",
    )
