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

from recon.counts.demodulation import DISTINCT, Line, line_columns, shares, window_columns
from recon.counts.record import CountsRecord

FloatArray = NDArray[np.floating]
REACH_HZ = 0.6
CLEARLY = 1.2
"""How much more than the least share must remain of a line, since its frequency still moves."""

FELT = 1e-3
"""Share of a line from which on it matters for the frequency, though it need not be removed."""

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
        Multiples that windows take up themselves.
    """

    frequency_Hz: float  # noqa: N815
    standard_error_Hz: float  # noqa: N815
    lines: tuple[Line, ...]
    hidden: tuple[int, ...]


def find_pickup(record: CountsRecord, traces: FloatArray, others: Sequence[Line]) -> Pickup | None:
    """Mains lines in the channels' mean frames (rows, frames), or None if there are none."""
    search = _Search(record, np.asarray(traces, np.float64), others)
    nominal, asked = record.acquisition.mains_Hz, record.acquisition.mains_harmonics
    clear = search.clear(nominal, asked, CLEARLY * DISTINCT)
    felt = search.clear(nominal, asked, FELT)
    if not clear:
        return None
    frequency, error = _frequency(search, nominal, felt)
    variance, degrees = search.variance(frequency, felt), 2 * len(clear) * len(traces)
    if search.energy(frequency, clear) / variance < degrees + STRONG * np.sqrt(2 * degrees):
        return None
    lines = tuple(Line(f"mains × {h}", h * frequency) for h in clear)
    return Pickup(frequency, error, lines, tuple(h for h in asked if h not in clear))


def _frequency(search: _Search, nominal: float, multiples: tuple[int, ...]) -> tuple[float, float]:
    """The mains' frequency and its standard error, Hz."""
    grid = nominal + np.linspace(-REACH_HZ, REACH_HZ, 61)
    step = grid[1] - grid[0]
    best = float(grid[int(np.argmax([search.energy(f, multiples) for f in grid]))])
    refined = minimize_scalar(
        lambda f: -search.energy(f, multiples), bounds=(best - step, best + step), method="bounded"
    )
    frequency, width = float(refined.x), step / 8
    here, below, above = (
        search.energy(frequency + shift, multiples) for shift in (0.0, -width, width)
    )
    bend = (above - 2 * here + below) / width**2
    variance = search.variance(frequency, multiples)
    return frequency, float(np.sqrt(2 * variance / max(-bend, 1e-300)))


class _Search:
    """The rows with everything but pickup projected out."""

    def __init__(self, record: CountsRecord, traces: FloatArray, others: Sequence[Line]) -> None:
        self._record = record
        angle = record.acquisition.frame_angles(record.instrument, record.protocol)
        self._windows, _ = np.linalg.qr(window_columns(angle))
        self._others = self._basis(self._columns(others)) if others else None
        self._rows = self._project(traces.T)

    def clear(self, frequency: float, multiples: tuple[int, ...], least: float) -> tuple[int, ...]:
        """The multiples of which at least a share remains beside windows and each other."""
        kept = tuple(h for h in multiples if self._shares(frequency, (h,))[0][0] >= least**2)
        while kept:
            values, vectors = self._shares(frequency, kept)
            if values[0] >= least**2:
                break
            worst = int(np.abs(vectors[:, 0]).argmax()) // 2
            kept = kept[:worst] + kept[worst + 1 :]
        return kept

    def _shares(self, frequency: float, multiples: Sequence[int]) -> tuple[FloatArray, FloatArray]:
        columns = self._columns([Line("", h * frequency) for h in multiples])
        rest = self._project(columns)
        return shares(rest.T @ rest, columns)

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
