"""Line lists of proton spectra and the time signals they make."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from recon.errors import InputError
from recon.physics.spins.composite import composite_choices
from recon.physics.spins.system import SpinSystem
from recon.physics.spins.transitions import transitions

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

SAME_LINE_HZ = 1e-6
"""Lines this close on the frequency axis, with equal decay, are one line."""

CHUNK = 2048
"""Lines evaluated at a time: bounds the memory of a time signal."""


@dataclass(frozen=True, eq=False)
class LineList:
    """Lines of a proton spectrum: s(t) = Σ_l a_l exp(−i 2π f_l t − r_l t).

    Attributes
    ----------
    frequencies
        f, (L,), Hz relative to the reference shift, ascending; positive towards higher ppm.
    intensities
        a, (L,), in protons: they add up to the protons of the molecule.
    decay_rates
        r, (L,), 1/s.
    """

    frequencies: FloatArray
    intensities: FloatArray
    decay_rates: FloatArray

    def __len__(self) -> int:
        return len(self.frequencies)

    @property
    def total(self) -> float:
        """Sum of intensities, in protons."""
        return float(self.intensities.sum())

    def scaled(self, factor: float) -> LineList:
        """The same lines with all intensities times `factor`."""
        return LineList(self.frequencies, self.intensities * factor, self.decay_rates)

    @classmethod
    def joined(cls, parts: Sequence[LineList]) -> LineList:
        """One list of all lines of several lists, degenerate lines merged."""
        return cls(
            np.concatenate([part.frequencies for part in parts]),
            np.concatenate([part.intensities for part in parts]),
            np.concatenate([part.decay_rates for part in parts]),
        ).merged()

    def merged(self) -> LineList:
        """Lines of one frequency (within SAME_LINE_HZ) and one decay rate summed, sorted."""
        if not len(self):
            return self
        rates = np.round(self.decay_rates, 9)
        order = np.lexsort((self.frequencies, rates))
        frequency, rate = self.frequencies[order], rates[order]
        new = (np.diff(frequency) > SAME_LINE_HZ) | (np.diff(rate) != 0)
        start = np.flatnonzero(np.append(True, new))
        weight = self.intensities[order]
        total = np.add.reduceat(weight, start)
        offset = frequency - np.repeat(frequency[start], np.diff(np.append(start, len(order))))
        centre = frequency[start] + np.add.reduceat(weight * offset, start) / total
        again = np.argsort(centre, kind="stable")
        return LineList(centre[again], total[again], rate[start][again])

    def pruned(self, fraction: float) -> LineList:
        """Without the weakest lines, which hold together at most `fraction` of the total."""
        order = np.argsort(self.intensities, kind="stable")
        below = np.cumsum(self.intensities[order]) <= fraction * self.total
        kept = np.sort(order[~below])
        return LineList(self.frequencies[kept], self.intensities[kept], self.decay_rates[kept])


def line_list(
    system: SpinSystem,
    larmor_frequency: float,
    reference_shift_ppm: float = 4.70,
    dropped_fraction: float = 1e-6,
) -> LineList:
    """Proton lines after a pulse on thermal or equally polarised spins, exact at any field.

    A pulse of flip angle θ only multiplies the whole list by sin θ. Each coupled group is solved by
    itself, each combination of composite spins by itself, each block of conserved Fz by itself.
    Couplings to unlike nuclei are weak (IzSz); all others keep their flip-flop terms.

    MEASURED

    Parameters
    ----------
    larmor_frequency
        Proton Larmor frequency, Hz, 0 or more.
    reference_shift_ppm
        The shift whose frequency is 0.
    dropped_fraction
        The weakest lines are left out as long as they hold at most this share of the protons, so
        the signal is wrong by no more than this share at any time.

    Raises
    ------
    InputError
        A negative or infinite frequency, a fraction outside [0, 1), unlike nuclei at zero field.
    """
    if not (0 <= larmor_frequency < np.inf and np.isfinite(reference_shift_ppm)):
        raise InputError(
            f"Larmor frequency {larmor_frequency} Hz and reference {reference_shift_ppm} ppm "
            "must be finite, the first not negative",
            "spectrum",
        )
    if not 0 <= dropped_fraction < 1:
        raise InputError(f"dropped fraction {dropped_fraction} must be in [0, 1)", "spectrum")
    system.check_weak_coupling(larmor_frequency)
    frequencies = system.frequencies(larmor_frequency, reference_shift_ppm)
    parts = []
    for group in system.coupled_groups():
        part = system.part(group)
        if part.protons:
            parts.append(_group_lines(part, frequencies[group], dropped_fraction / 2))
    return LineList.joined(parts).pruned(dropped_fraction / 2)


def _group_lines(group: SpinSystem, frequencies: FloatArray, dropped_fraction: float) -> LineList:
    """Lines of one coupled group with its own ν_k; intensities add up to its protons."""
    if len(group.names) == 1:
        return LineList(frequencies, group.counts.astype(np.float64), 1 / group.decay_times)
    parts = []
    for twice_spin, often in composite_choices(group.counts.tolist()):
        weight = 2.0 * often / 2.0 ** int(group.counts.sum())
        for frequency, strength, rate in transitions(
            group, twice_spin, frequencies, dropped_fraction
        ):
            parts.append(LineList(frequency, strength * weight, rate).merged())
    return LineList.joined(parts)


def time_signal(lines: LineList, times: ArrayLike, t2_star: float = np.inf) -> ComplexArray:
    """s(t) = exp(−t/T2*) Σ_l a_l exp(−i 2π f_l t − r_l t), (T,), complex128.

    Even times t = t0 + (pB + q) Δt split every exponential into a factor of p and one of q, so the
    sum is one matrix product of (T/B, L) with (L, B), B ≈ √T: exact, and fast for the thousands of
    lines that occur here. Other times are summed directly.

    Parameters
    ----------
    times
        Sample times, (T,), seconds; any order, best evenly spaced.
    t2_star
        Common transverse decay time on top of the lines' own decay, seconds; may be infinite.

    Raises
    ------
    InputError
        Times that are not finite, or a decay time that is not positive.
    """
    seconds = np.atleast_1d(np.asarray(times, dtype=np.float64))
    if seconds.ndim != 1 or not np.isfinite(seconds).all():
        raise InputError("must be one row of finite seconds", "sample times")
    if not t2_star > 0:
        raise InputError(f"{t2_star} s must be positive", "T2*")
    blocks, width = _even_blocks(seconds)
    step = (seconds[-1] - seconds[0]) / (len(seconds) - 1) if width > 1 else 0.0
    signal = np.zeros((blocks, width), dtype=np.complex128)
    for start in range(0, len(lines), CHUNK):
        part = slice(start, start + CHUNK)
        rate = -2j * np.pi * lines.frequencies[part] - lines.decay_rates[part]
        if width > 1:
            left = _powers(np.exp(rate * (step * width)), blocks)
            left *= lines.intensities[part] * np.exp(rate * seconds[0])
        else:
            left = np.exp(np.multiply.outer(seconds, rate)) * lines.intensities[part]
        signal += left @ _powers(np.exp(rate * step), width).T
    return np.asarray(signal.ravel()[: len(seconds)] * np.exp(-seconds / t2_star))


def _even_blocks(seconds: FloatArray) -> tuple[int, int]:
    """Blocks and samples per block, near √T each, if the times are even; else (T, 1)."""
    steps = np.diff(seconds)
    if len(seconds) < 4 or not np.allclose(steps, steps.mean(), rtol=1e-9, atol=0):
        return len(seconds), 1
    width = int(np.ceil(np.sqrt(len(seconds))))
    return -(-len(seconds) // width), width


def _powers(base: ComplexArray, count: int) -> ComplexArray:
    """base^0 ... base^(count − 1), (count, L), by doubling: log2(count) roundings at most."""
    powers = np.empty((count, len(base)), dtype=np.complex128)
    powers[0] = 1.0
    done, step = 1, base
    while done < count:
        more = min(done, count - done)
        np.multiply(powers[:more], step, out=powers[done : done + more])
        done, step = done + more, step * step
    return powers
