"""Removal of a strong line, such as water's, from every voxel before weak neighbours are fitted.

A voxel's signal is demodulated to the line's place and decimated by a filter that lets a band about
it pass; filtered exponentials stay exponentials. The leading left singular vectors U of the Hankel
matrix of what is left span them, and the eigenvalues of the shift U↑ → U↓ are their poles
(Barkhuijsen, de Beer & van Ormondt, J. Magn. Reson. 73:553, 1987). The strongest pole gives the
voxel's shift; strong poles about it are the line. They and the known weak lines, moved along by
the same shift, are then fitted to the full signal by Gauss–Newton, so that neither takes from the
other.
A line of any shape is met by a few exponentials; its shift and width are each voxel's own.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy.signal import firwin

from recon.errors import InputError, InputWarning
from recon.physics.spins import LineList
from recon.quantify.patterns import Pattern
from recon.result import Cube

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
CHUNK = 128
STRONG = 0.01
"""Share of the strongest pole's amplitude from which a pole is part of the line."""
DOMINANT = 40.0
"""How much stronger than the rest a line must be for its removal to be safe."""
FARTHEST = 10.0
"""Largest change of a rate in one step, 1/s."""
LEFTOVER = 1.5
"""Residual energy over the median from which a voxel is taken to be stuck."""
LONGEST = 64
"""Decimated samples that are used at most; the line has decayed after them."""


@dataclass(frozen=True, eq=False)
class Removed:
    """A cube without the line.

    Attributes
    ----------
    cube
        What is left.
    amplitude
        Complex magnetisation of the line at time 0, A/m, (nz, ny, nx).
    shift_Hz
        Of the line's strongest pole from where it was expected, (nz, ny, nx).
    """

    cube: Cube
    amplitude: ComplexArray
    shift_Hz: FloatArray  # noqa: N815


@dataclass(frozen=True)
class LineRemoval:
    """How to remove it.

    Attributes
    ----------
    centre_ppm
        Where the line is expected.
    search_Hz
        How far from there its strongest pole may lie.
    half_width_Hz
        How far from that pole others may lie.
    poles
        Number of exponentials in all that are looked for in the searched band.
    refinements
        Gauss–Newton steps.
    """

    centre_ppm: float = 4.70
    search_Hz: float = 30.0  # noqa: N815
    half_width_Hz: float = 12.0  # noqa: N815
    poles: int = 8
    refinements: int = 6

    def __post_init__(self) -> None:
        if min(self.half_width_Hz, self.search_Hz) <= 0 or self.poles < 1:
            raise InputError("needs positive widths and at least one pole", "line removal")

    def covers(self, lines: LineList, reference_shift_ppm: float, larmor_frequency: float) -> bool:
        """Most of these lines, at offsets from the reference shift, is what it removes."""
        offset = (self.centre_ppm - reference_shift_ppm) * 1e-6 * larmor_frequency
        near = np.abs(lines.frequencies - offset) <= self.half_width_Hz
        size = np.abs(lines.intensities)
        return bool(size[near].sum() > 0.5 * size.sum())

    def remove(
        self,
        cube: Cube,
        others: Sequence[Pattern] = (),
        progress: Callable[[int, int], None] | None = None,
    ) -> Removed:
        """Take the line out of every voxel.

        Parameters
        ----------
        others
            Weak lines that must not be taken along.

        Raises
        ------
        InputError
            Samples are not evenly spaced or too few.
        """
        dwell, count = cube.dwell, len(cube.values)
        decimate, step = self._decimation(dwell, count)
        offset = (self.centre_ppm - cube.reference_shift_ppm) * 1e-6 * cube.larmor_frequency
        carrier = np.exp(2j * np.pi * offset * np.asarray(cube.sample_times))
        courses = [pattern.courses for pattern in others]
        known = np.concatenate(courses, axis=1) if courses else np.zeros((count, 0), complex)
        known = carrier[:, None] * known / max(float(np.abs(known).max(initial=0)), 1e-300)
        signal = np.ascontiguousarray(cube.values.reshape(count, -1).T)
        left = np.empty_like(signal)
        amplitude = np.empty(len(signal), np.complex64)
        shift, lead = (np.empty(len(signal), np.float32) for _ in range(2))
        times = np.asarray(cube.sample_times, float)
        starts = range(0, len(signal), CHUNK)

        def work(first: int) -> None:
            part = slice(first, first + CHUNK)
            turned = signal[part].astype(complex) * carrier
            rates = self._rates(turned @ decimate, step * dwell)
            shift[part], lead[part], rates = self._strong(turned, rates, times)
            moved = -2j * np.pi * shift[part].astype(float)
            line, at_zero = _fitted_line(turned, rates, known, moved, times, self.refinements)
            left[part] = (turned - line) * carrier.conj()
            amplitude[part] = at_zero.sum(axis=1)

        with ThreadPoolExecutor(2) as pool:
            for done, _ in enumerate(pool.map(work, starts)):
                if progress is not None:
                    progress(done + 1, len(starts))
        self._warn_if_weak(float(np.median(lead)))
        remark = (
            f"a strong line at {self.centre_ppm:g} ppm was taken out ({self.poles} exponentials)"
        )
        account = replace(cube.account, remarks=(*cube.account.remarks, remark))
        values = left.T.reshape(cube.values.shape)
        shape = cube.grid.shape
        return Removed(
            replace(cube, values=np.ascontiguousarray(values), account=account),
            amplitude.reshape(shape),
            shift.reshape(shape),
        )

    def _decimation(self, dwell: float, count: int) -> tuple[FloatArray, int]:
        """Low pass and decimation as one matrix (times, kept), and the step between kept times."""
        step = int(min(1 / dwell / (3 * self.search_Hz), count / (6 * self.poles)))
        taps = np.ones(1)
        if step >= 2:
            taps = firwin(4 * step + 1, 1.5 * self.search_Hz, fs=1 / dwell)
        step = max(step, 1)
        kept = min((count - len(taps)) // step + 1, LONGEST)
        if kept < 2 * self.poles + 2:
            raise InputError(
                f"{count} samples are too few for {self.poles} poles", "line removal", "use fewer"
            )
        matrix = np.zeros((count, kept))
        for place in range(kept):
            matrix[place * step : place * step + len(taps), place] = taps
        return matrix, step

    def _rates(self, decimated: ComplexArray, dwell: float) -> ComplexArray:
        """Complex rates of the poles within the searched band, (V, poles); NaN beyond it."""
        length = decimated.shape[1] // 2
        hankel = sliding_window_view(decimated, length, axis=1)
        gram = np.matmul(hankel.transpose(0, 2, 1), hankel.conj())
        _, vectors = np.linalg.eigh(gram)
        span = vectors[:, :, -self.poles :]
        upper, lower = span[:, :-1], span[:, 1:]
        adjoint = upper.conj().transpose(0, 2, 1)
        shift = np.linalg.solve(adjoint @ upper, adjoint @ lower)
        poles = np.linalg.eigvals(shift)
        rates = np.log(np.where(poles == 0, 1e-30, poles)) / dwell
        rates = np.minimum(rates.real, 0) + 1j * rates.imag
        inside = np.abs(rates.imag) <= 2 * np.pi * self.search_Hz
        return np.where(inside, rates, np.nan)

    def _strong(
        self, turned: ComplexArray, rates: ComplexArray, times: FloatArray
    ) -> tuple[FloatArray, FloatArray, ComplexArray]:
        """Shift of the strongest pole, Hz, how much stronger it is than poles that are not of the
        line, and the rates of the line; NaN for other poles.
        """
        size = np.abs(_solved(_waves(rates, times), turned))
        best = size.argmax(axis=1)[:, None]
        middle = np.nan_to_num(np.take_along_axis(rates, best, 1).imag)
        near = np.abs(rates.imag - middle) <= 2 * np.pi * self.half_width_Hz
        strong = size > STRONG * np.take_along_axis(size, best, 1)
        second = np.where(near, 0, size).max(axis=1)
        lead = size.max(axis=1) / np.maximum(second, 1e-30)
        return -middle[:, 0] / (2 * np.pi), lead, np.where(near & strong, rates, np.nan)

    def _warn_if_weak(self, lead: float) -> None:
        if lead < DOMINANT:
            warnings.warn(
                f"no line near {self.centre_ppm:g} ppm is much stronger than its neighbours "
                f"({lead:.2g} times); what was removed may be one of them",
                InputWarning,
                stacklevel=3,
            )


def _waves(rates: ComplexArray, times: FloatArray) -> ComplexArray:
    """exp(rate t), (V, T, poles); 0 where a rate is NaN."""
    absent = np.isnan(rates)
    waves = np.exp(np.where(absent, 0, rates)[:, None, :] * times[:, None])
    return np.where(absent[:, None, :], 0, waves)


def _solved(columns: ComplexArray, data: ComplexArray) -> ComplexArray:
    """Least squares of (V, T, n) columns to (V, T) data, (V, n); empty columns get 0."""
    adjoint = columns.conj().transpose(0, 2, 1)
    normal = adjoint @ columns
    size = np.sqrt(np.einsum("vii->vi", normal).real)
    size[size == 0] = 1
    normal = normal / (size[:, :, None] * size[:, None])
    diagonal = np.arange(normal.shape[1])
    normal[:, diagonal, diagonal] += 1e-10
    right = np.matmul(adjoint, data[..., None])[..., 0] / size
    return np.linalg.solve(normal, right[..., None])[..., 0] / size


def _fitted_line(
    turned: ComplexArray,
    rates: ComplexArray,
    known: ComplexArray,
    moved: ComplexArray,
    times: FloatArray,
    refinements: int,
) -> tuple[ComplexArray, ComplexArray]:
    """The line (V, T) and its poles' amplitudes at time 0 (V, poles).

    Known courses (T, C) stand beside it, all moved by exp(rate t), `moved` (V,). Voxels that leave
    much more than most start again from the poles of the voxel that leaves least.
    """
    count = rates.shape[1]
    rates = np.concatenate([rates, moved[:, None]], axis=1)
    best, least = _refined(turned, rates, known, times, refinements)
    stuck = np.flatnonzero(least > LEFTOVER * np.median(least))
    if stuck.size:
        donor = int(least.argmin())
        start = best[donor] + (moved[stuck] - moved[donor])[:, None]
        again, left = _refined(turned[stuck], start, known, times, 2 * refinements)
        better = left < least[stuck]
        best[stuck[better]] = again[better]
    waves, beside = _waves(best[:, :count], times), _waves(best[:, count:], times) * known
    amplitudes = _solved(np.concatenate([waves, beside], axis=2), turned)[:, :count]
    return np.matmul(waves, amplitudes[..., None])[..., 0], amplitudes


def _refined(
    turned: ComplexArray,
    rates: ComplexArray,
    known: ComplexArray,
    times: FloatArray,
    refinements: int,
) -> tuple[ComplexArray, FloatArray]:
    """Gauss–Newton on the rates (V, poles + 1), the last that of the known courses; Σ|rest|²."""
    count = rates.shape[1] - 1
    best, least = rates, np.full(len(rates), np.inf)
    for _ in range(refinements + 1):
        waves = _waves(rates, times)
        linear = np.concatenate([waves[:, :, :count], waves[:, :, count:] * known], axis=2)
        found = _solved(linear, turned)
        rest = turned - np.matmul(linear, found[..., None])[..., 0]
        energy = (rest.real**2 + rest.imag**2).sum(axis=1)
        better = energy < least
        best, least = np.where(better[:, None], rates, best), np.where(better, energy, least)
        grown = waves[:, :, :count] * found[:, None, :count]
        others = np.matmul(linear[:, :, count:], found[:, count:, None])
        slopes = times[:, None] * np.concatenate([grown, others], axis=2)
        step = _solved(np.concatenate([linear, slopes], axis=2), rest)[:, -count - 1 :]
        step *= np.minimum(1, FARTHEST / np.maximum(np.abs(step), 1e-30))
        # a step that made things worse is taken back by half
        rates = np.where(better[:, None], rates + step, (rates + best) / 2)
        rates[:, :count] = np.minimum(rates[:, :count].real, 0) + 1j * rates[:, :count].imag
    return best, least
