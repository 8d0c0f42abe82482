"""Which assumption about the lines a cube refuses.

Every voxel's time course is taken as real amounts of fixed courses. For each way in which that may
be wrong, one parameter common to all voxels is scanned, and the fall of χ² it allows is noted:

    line position   φ_s(t) e^{−i2πΔt}         line width   φ_s(t) e^{−Γt}
    phase           φ_s(t) e^{iθ}              diffusion    φ_s(t) e^{−D u² t} at wavenumber u
    unlisted line   one more course e^{−i2πft − rt}, its amount free in every voxel

χ² is a sum over lateral bands, so that what decays faster at fine detail is told from what decays
faster everywhere. This is a likelihood-ratio test with the amounts as nuisances (Wilks, Ann. Math.
Stat. 9:60, 1938). Noise is taken as white; the prior behind the cube correlates it, so that only a
fall that is also a fair share of the species' own signal counts.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.grid import Grid
from recon.quantify.noise import VoxelNoise
from recon.quantify.patterns import Pattern
from recon.result import Cube

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

BANDS = 4
LEADING = 32
SURE = 50.0
"""Fall of χ² that counts at least."""
SHARE = 0.02
"""Fall of χ² as a share of the species' own, below which the prior may be what is seen."""
SHARE_OF_ALL = 0.005
"""The same for an unlisted line, of all that the lines explain."""
CLEARLY = 1.03
"""A line more must explain so much more than one parameter, since it is free in every voxel."""

POSITION, WIDTH, PHASE = "line position", "line width", "phase"
DIFFUSION, UNLISTED = "diffusion", "unlisted line"
EVERY = "all species"


@dataclass(frozen=True)
class Refusal:
    """One assumption that the data refuse.

    Attributes
    ----------
    assumption
        `line position`, `line width`, `phase`, `diffusion` or `unlisted line`.
    species
        Whose, or `all species`; empty for an unlisted line.
    value, unit
        What would suit the data better: Hz, rad, µm²/ms.
    gain
        By how much χ² falls.
    share
        The same as a share of what the species (or all lines) explains.
    """

    assumption: str
    species: str
    value: float
    unit: str
    gain: float
    share: float

    def __str__(self) -> str:
        what = {
            POSITION: f"off by {self.value:+.3g} {self.unit}",
            WIDTH: f"{self.value:+.3g} {self.unit} wider than assumed",
            PHASE: f"off by {self.value:+.3g} {self.unit}",
            DIFFUSION: f"fine detail decays as if by {self.value:.2g} {self.unit}",
            UNLISTED: f"at {self.value:.4g} {self.unit}",
        }[self.assumption]
        whose = f" of {self.species}" if self.species else ""
        return f"{self.assumption}{whose}: {what} (chi-squared falls by {self.gain:.3g})"


def refused(
    cube: Cube,
    patterns: Sequence[Pattern],
    noise_sd: FloatArray | None = None,
    shift_bound_Hz: float = 30.0,
) -> list[Refusal]:
    """What the cube refuses of fixed lines with amounts free, the worst first; empty if nothing.

    Raises
    ------
    InputError
        The cube has no standard errors and no noise is stated.
    """
    test = _Test(cube, patterns, VoxelNoise.of(cube, noise_sd))
    found = [one for one in test.of_each(shift_bound_Hz) if one.share > SHARE and one.gain > SURE]
    found.sort(key=lambda one: -one.gain)
    extra = test.unlisted()
    if extra.gain > SURE and extra.share > SHARE_OF_ALL:
        best = found[0].gain if found else 0.0
        found.insert(0 if extra.gain > CLEARLY * best else len(found), extra)
    return found


class _Test:
    """Leading real time courses of every band, and the patterns, stacked real over imaginary."""

    def __init__(self, cube: Cube, patterns: Sequence[Pattern], noise: VoxelNoise) -> None:
        self.names = [pattern.name for pattern in patterns]
        self.courses = [np.asarray(pattern.courses, complex) for pattern in patterns]
        self.times = np.asarray(cube.sample_times, float)
        self.reference, self.larmor = cube.reference_shift_ppm, cube.larmor_frequency
        weight = np.where(noise.known, np.sqrt(2) / noise.sigma, 0).astype(np.float32)
        waves = scipy.fft.fft2(weight * cube.values, workers=2)
        self.data, self.wave = [], []
        for band, wave in _bands(cube.grid):
            inside = scipy.fft.ifft2(waves * band, workers=2)
            self.data.append(_leading(_stacked(inside.reshape(len(self.times), -1))))
            self.wave.append(wave)
        self.rates = [_rate(course, self.times) for course in self.courses]
        self.explained = self._explained([self.courses] * len(self.data))

    def of_each(self, shift_bound: float) -> list[Refusal]:
        """The best value of each parameter, for every species and for all together."""
        best: list[Refusal] = []
        step = 0.25 / float(self.times[-1] - self.times[0])
        count = min(int(np.ceil(shift_bound / step)), 60)
        t = self.times
        for whose in [*range(len(self.names)), -1]:
            rate = float(np.median(self.rates)) if whose < 0 else self.rates[whose]
            scans: list[tuple[str, str, FloatArray, Callable[[float, float], ComplexArray]]] = [
                (
                    POSITION,
                    "Hz",
                    np.linspace(-shift_bound, shift_bound, 2 * count + 1),
                    lambda v, _: np.exp(-2j * np.pi * v * t),
                ),
                (
                    WIDTH,
                    "Hz",
                    rate / np.pi * np.concatenate([[-0.4, -0.25, -0.1], np.geomspace(0.1, 10, 16)]),
                    lambda v, _: np.exp(-np.pi * v * t),
                ),
                (
                    PHASE,
                    "rad",
                    np.linspace(-np.pi / 2, np.pi / 2, 25)[1:],
                    lambda v, _: np.full(len(t), np.exp(1j * v)),
                ),
            ]
            if max(self.wave) > 0:
                most = rate / max(self.wave) ** 2 * 1e9
                grid = most * np.geomspace(0.05, 30, 20)
                scans.append((DIFFUSION, "um2/ms", grid, lambda v, u: np.exp(-v * 1e-9 * u**2 * t)))
            found = [self._scanned(whose, *scan) for scan in scans]
            best += found
        return _one_or_all(best, self.names)

    def _scanned(
        self,
        whose: int,
        what: str,
        unit: str,
        values: FloatArray,
        change: Callable[[float, float], ComplexArray],
    ) -> Refusal:
        """The value of one parameter of one species (−1: all) that explains most."""

        def explained(value: float) -> float:
            by_band = []
            for wave in self.wave:
                factor = change(value, wave)[:, None]
                by_band.append(
                    [
                        course * factor if whose in (place, -1) else course
                        for place, course in enumerate(self.courses)
                    ]
                )
            return self._explained(by_band)

        gains = np.array([explained(float(value)) for value in values])
        place = int(gains.argmax())
        gain = float(gains[place] - self.explained)
        others = [c for number, c in enumerate(self.courses) if number != whose]
        rest = self._explained([others] * len(self.data)) if whose >= 0 and others else 0.0
        own = max(float(gains[place]) - rest, 1e-30)
        name = EVERY if whose < 0 else self.names[whose]
        return Refusal(what, name, float(values[place]), unit, gain, gain / own)

    def unlisted(self) -> Refusal:
        """The place where one more line explains most, beyond what it explains elsewhere."""
        span = float(self.times[-1] - self.times[0])
        dwell = span / (len(self.times) - 1) if len(self.times) > 1 else 1.0
        places = np.arange(-0.5 / dwell, 0.5 / dwell, 0.5 / max(span, dwell))
        rate = float(np.median(self.rates))
        lines = np.exp(-(2j * np.pi * places + rate) * self.times[:, None])
        basis, _ = np.linalg.qr(_stacked(np.concatenate(self.courses, axis=1)))
        columns = _stacked(lines)
        left = columns - basis @ (basis.T @ columns)
        size = np.linalg.norm(left, axis=0)
        useful = size > 0.3 * np.linalg.norm(columns, axis=0)
        left = left / np.maximum(size, 1e-30)
        gains = np.sum([((left.T @ data) ** 2).sum(axis=1) for data in self.data], axis=0)
        if not useful.any():
            return Refusal(UNLISTED, "", 0.0, "ppm", 0.0, 0.0)
        gains = np.where(useful, gains - np.median(gains[useful]), 0)
        place = int(gains.argmax())
        ppm = self.reference + places[place] / (self.larmor * 1e-6)
        share = float(gains[place] / max(self.explained, 1e-30))
        return Refusal(UNLISTED, "", float(ppm), "ppm", float(gains[place]), share)

    def _explained(self, by_band: Sequence[Sequence[ComplexArray]]) -> float:
        """Energy, in units of noise, within the real span of the courses, summed over bands."""
        total, same = 0.0, all(one is by_band[0] for one in by_band)
        basis = None
        for courses, data in zip(by_band, self.data, strict=True):
            if basis is None or not same:
                stacked = _stacked(np.concatenate(list(courses), axis=1))
                basis, _ = np.linalg.qr(stacked / np.linalg.norm(stacked, axis=0))
            total += float(((basis.T @ data) ** 2).sum())
        return total


def _one_or_all(found: list[Refusal], names: Sequence[str]) -> list[Refusal]:
    """Of each kind, that of all species if it explains clearly more than the best single one."""
    kept = []
    for kind in {one.assumption for one in found}:
        alike = [one for one in found if one.assumption == kind]
        every = [one for one in alike if one.species == EVERY]
        single = [one for one in alike if one.species != EVERY]
        best = max(single, key=lambda one: one.gain)
        if len(names) == 1 or every[0].gain <= CLEARLY * best.gain:
            kept += single
        else:
            kept.append(replace(every[0], share=every[0].gain / max(best.gain / best.share, 1e-30)))
    return kept


def _bands(grid: Grid) -> list[tuple[FloatArray, float]]:
    """Masks (ny, nx) of lateral bands in the FFT's order, and the r.m.s. wavenumber of each."""
    (ny, nx), (dy, dx) = grid.shape[1:], grid.voxel[1:]
    wave_y, wave_x = (2 * np.pi * np.fft.fftfreq(n, d) for n, d in ((ny, dy), (nx, dx)))
    wave = np.hypot(wave_y[:, None], wave_x)
    edges = wave.max() * np.linspace(0, 1, BANDS + 1)
    number = np.clip(np.searchsorted(edges, wave, side="right") - 1, 0, BANDS - 1)
    bands = []
    for band in range(BANDS):
        inside = number == band
        if inside.any():
            bands.append((inside.astype(np.float32), float(np.sqrt((wave[inside] ** 2).mean()))))
    return bands


def _stacked(courses: ComplexArray) -> FloatArray:
    return np.concatenate([courses.real, courses.imag])


def _leading(data: FloatArray) -> FloatArray:
    """Leading left singular vectors times their values, by a random sketch with one iteration.

    Source: Halko, Martinsson & Tropp, SIAM Review 53:217 (2011).
    """
    width = min(LEADING + 8, *data.shape)
    random = np.random.default_rng(0).standard_normal((data.shape[1], width), np.float32)
    span, _ = np.linalg.qr(data @ random)
    span, _ = np.linalg.qr(data @ (data.T @ span))
    vectors, values, _ = np.linalg.svd(span.T @ data, full_matrices=False)
    return np.asarray((span @ vectors * values)[:, :LEADING], float)


def _rate(courses: ComplexArray, times: FloatArray) -> float:
    """Decay rate of a line with as much energy: |φ(0)|² / 2∫|φ|², 1/s."""
    power = (np.abs(courses) ** 2).sum(axis=1)
    energy = float(np.trapezoid(power, times))
    return float(power[0] / (2 * max(energy, 1e-300)))
