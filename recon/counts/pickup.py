"""Lines picked up from the mains: their frequency from the frames themselves, and which matter.

The mains drift by tenths of a hertz. With windows and tone projected out, the frequency is that
at which its multiples explain most of the channels' mean,

    E(f) = Σ_rows |Q(f)ᵀ M y|²,    standard error 1/√(−E″ / 2σ²),

Q an orthonormal basis of the projected lines (least squares; Kay, Fundamentals of Statistical
Signal Processing: Estimation Theory, 1993, chapter 7).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from recon.counts.demodulation import DISTINCT, Line, line_columns, remaining_share
from recon.counts.record import CountsRecord

FloatArray = NDArray[np.floating]
REACH_HZ = 0.6
STRONG = 5.0
"""Standard deviations by which the lines must stand out to be believed."""


@dataclass(frozen=True)
class Pickup:
    """Mains lines in the frames.

    Attributes
    ----------
    frequency_Hz, standard_error_Hz
        Of the mains.
    lines
        The multiples that are removed.
    hidden
        Multiples that windows cannot tell from their own level or sample.
    """

    frequency_Hz: float  # noqa: N815
    standard_error_Hz: float  # noqa: N815
    lines: tuple[Line, ...]
    hidden: tuple[int, ...]


def find_pickup(record: CountsRecord, traces: FloatArray, others: Sequence[Line]) -> Pickup | None:
    """Mains lines in the channels' mean frames (rows, frames), or None if there are none."""
    search = _Search(record, np.asarray(traces, np.float64), others)
    nominal = record.acquisition.mains_Hz
    clear = tuple(h for h in record.acquisition.mains_harmonics if search.is_clear(h * nominal))
    hidden = tuple(h for h in record.acquisition.mains_harmonics if h not in clear)
    if not clear:
        return None
    grid = nominal + np.linspace(-REACH_HZ, REACH_HZ, 61)
    energy = [search.energy(f, clear) for f in grid]
    step = grid[1] - grid[0]
    best = float(grid[int(np.argmax(energy))])
    refined = minimize_scalar(
        lambda f: -search.energy(f, clear), bounds=(best - step, best + step), method="bounded"
    )
    frequency = float(refined.x)
    variance = search.variance(frequency, clear)
    degrees = 2 * len(clear) * len(traces)
    if search.energy(frequency, clear) / variance < degrees + STRONG * np.sqrt(2 * degrees):
        return None
    width = step / 8
    bend = (
        search.energy(frequency + width, clear)
        - 2 * search.energy(frequency, clear)
        + search.energy(frequency - width, clear)
    ) / width**2
    error = float(np.sqrt(2 * variance / max(-bend, 1e-300)))
    lines = tuple(Line(f"mains × {h}", h * frequency) for h in clear)
    return Pickup(frequency, error, lines, hidden)


class _Search:
    """The rows with everything but pickup projected out."""

    def __init__(self, record: CountsRecord, traces: FloatArray, others: Sequence[Line]) -> None:
        self._record = record
        angle = record.acquisition.frame_angles(record.instrument, record.protocol)
        level = np.stack([np.ones_like(angle), np.cos(angle), np.sin(angle)], axis=-1)
        self._windows, _ = np.linalg.qr(level)
        self._others = self._basis(self._columns(others)) if others else None
        self._rows = self._project(traces.T)

    def is_clear(self, frequency: float) -> bool:
        """A line there is not explained by windows or other lines."""
        columns = self._columns([Line("", frequency)])
        rest = self._project(columns)
        return remaining_share(rest.T @ rest, columns) >= DISTINCT

    def energy(self, frequency: float, multiples: Sequence[int]) -> float:
        """E(f)."""
        return float((self._explained(frequency, multiples) ** 2).sum())

    def variance(self, frequency: float, multiples: Sequence[int]) -> float:
        """Variance of a frame that nothing explains."""
        windows, per_window, fitted = self._windows.shape
        others = 0 if self._others is None else self._others.shape[1]
        freedom = windows * (per_window - fitted) - others - 2 * len(multiples)
        left = (self._rows**2).sum() - self.energy(frequency, multiples)
        return float(left / (max(freedom, 1) * self._rows.shape[1]))

    def _explained(self, frequency: float, multiples: Sequence[int]) -> FloatArray:
        lines = [Line("", h * frequency) for h in multiples]
        basis, _ = np.linalg.qr(self._project(self._columns(lines)))
        return np.asarray(basis.T @ self._rows)

    def _columns(self, lines: Sequence[Line]) -> FloatArray:
        return line_columns(lines, self._record.acquisition, self._record.protocol)

    def _basis(self, columns: FloatArray) -> FloatArray:
        basis, _ = np.linalg.qr(self._project(columns))
        return np.asarray(basis)

    def _project(self, columns: FloatArray) -> FloatArray:
        windows, per_window, _ = self._windows.shape
        shaped = columns.reshape(windows, per_window, -1)
        rest = shaped - self._windows @ (np.swapaxes(self._windows, 1, 2) @ shaped)
        rest = rest.reshape(windows * per_window, -1)
        others = getattr(self, "_others", None)
        return rest if others is None else rest - others @ (others.T @ rest)
