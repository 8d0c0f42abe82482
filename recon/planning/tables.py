"""Tables of shots made from a rule: full raster, uniform random, Gaussian variable density.

Lateral wavevectors always lie on the grid's frequency lattice, m · 2π/(N d) with
−N/2 <= m < N/2, so that an encoding is a circular shift of the object's spectrum. What a rule
places is the object frequency u = k + q. Without a sensor gradient that is k itself; with one,
`SensorRing` takes part of it onto the sensor spins.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import Protocol as Interface

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import norm, qmc

from recon.errors import InputError
from recon.grid import Grid
from recon.protocol import REFERENCE_SHIFT_PPM, Protocol, SpectralAxis

Steps = NDArray[np.int64]
RING_DIRECTIONS = 64


class SensorShare(Interface):
    """How much of each object frequency the sensor gradient carries."""

    def steps(self, object_steps: Steps, grid: Grid, random: np.random.Generator) -> Steps:
        """Lattice steps (shots, 2) along (x, y) of q, given those of u = k + q."""
        ...


@dataclass(frozen=True)
class NoSensorGradient:
    """q = 0: the nuclear gradient alone."""

    def steps(self, object_steps: Steps, grid: Grid, random: np.random.Generator) -> Steps:
        """All zero, (shots, 2)."""
        return np.zeros_like(object_steps)


@dataclass(frozen=True)
class SensorGradientOnly:
    """q = u, k = 0: the sensor gradient alone, so that nothing diffuses away."""

    def steps(self, object_steps: Steps, grid: Grid, random: np.random.Generator) -> Steps:
        """A copy of the object's steps, (shots, 2)."""
        return object_steps.copy()


@dataclass(frozen=True)
class SensorRing:
    """|q| near a stated wavenumber, direction random, k = u − q.

    One detector sees field frequency κ = q alone, so the ring picks the band in which the
    response is strong: wavenumber ≈ 1/(height + sensor depth). Several wavenumbers, taken in turn,
    weight the depths differently.
    """

    wavenumber_rad_per_um: tuple[float, ...]

    def __post_init__(self) -> None:
        if not self.wavenumber_rad_per_um or not min(self.wavenumber_rad_per_um) > 0:
            raise InputError("wavenumber_rad_per_um needs positive numbers", "sensor ring")

    def steps(self, object_steps: Steps, grid: Grid, random: np.random.Generator) -> Steps:
        """Lattice points nearest the ring for which u − q still lies on the lattice."""
        shots, step = len(object_steps), np.array(grid.lattice_step[::-1])
        radii = np.resize(self.wavenumber_rad_per_um, shots) * 1e6
        turn = random.uniform(0, 2 * np.pi, shots)[:, None]
        angle = turn + np.arange(RING_DIRECTIONS) * (2 * np.pi / RING_DIRECTIONS)
        order = random.permuted(np.tile(np.arange(RING_DIRECTIONS), (shots, 1)), axis=1)
        angle = np.take_along_axis(angle, order, axis=1)
        circle = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
        tried = np.rint(radii[:, None, None] * circle / step).astype(np.int64)
        low, high = _band(grid)
        nuclear = object_steps[:, None] - tried
        inside = ((tried >= low) & (tried <= high) & (nuclear >= low) & (nuclear <= high)).all(-1)
        inside &= tried.any(-1)
        stuck = np.flatnonzero(~inside.any(axis=1))
        if stuck.size:
            ring = radii[stuck[0]] / 1e6
            raise InputError(
                f"a ring of {ring:g} rad/um has no place on the grid's lattice",
                "sensor ring",
                "choose a wavenumber between the lattice step and the Nyquist wavenumber",
            )
        return np.asarray(tried[np.arange(shots), inside.argmax(axis=1)])


@dataclass(frozen=True, kw_only=True)
class Table(ABC):
    """What all rules share.

    Attributes
    ----------
    axes
        Sensing axes (1 to 4) taken in turn, one per shot; a single one is kept throughout.
    axial_bound_rad_per_um
        k_z is uniform between plus and minus this bound; 0 for no gradient along z.
    sensor
        What part of the wavevector the sensor gradient carries.
    seed
        Seed of everything random in the table.
    """

    axes: tuple[int, ...] = (1,)
    axial_bound_rad_per_um: float = 0.0
    sensor: SensorShare = NoSensorGradient()
    seed: int = 0

    def __post_init__(self) -> None:
        if not self.axes or any(axis not in (1, 2, 3, 4) for axis in self.axes):
            raise InputError(f"sensing axes {self.axes}", "table of shots", "use 1, 2, 3 or 4")
        if not 0 <= self.axial_bound_rad_per_um < np.inf:
            raise InputError("axial_bound_rad_per_um must not be negative", "table of shots")

    @abstractmethod
    def object_steps(self, grid: Grid, random: np.random.Generator) -> tuple[Steps, Steps]:
        """Lattice steps (shots, 2) along (x, y), and the sensing axis of each shot (shots,)."""

    def protocol(
        self,
        grid: Grid,
        sample_times: ArrayLike,
        *,
        averages: int = 1,
        shot_duration: float = 1.0,
        spectral_axis: SpectralAxis = SpectralAxis.LISTEN_AFTER_ENCODING,
        reference_shift_ppm: float = REFERENCE_SHIFT_PPM,
    ) -> Protocol:
        """The table on this grid's lattice; times in seconds.

        Raises
        ------
        InputError
            More shots than the lattice has points for each sensing axis.
        """
        random = np.random.default_rng(self.seed)
        wanted, axis = self.object_steps(grid, random)
        sensor = self.sensor.steps(wanted, grid, random)
        step = np.array(grid.lattice_step[::-1])
        nuclear = np.zeros((len(wanted), 3))
        nuclear[:, :2] = (wanted - sensor) * step
        bound = self.axial_bound_rad_per_um * 1e6
        if bound > 0:
            nuclear[:, 2] = random.uniform(-bound, bound, len(wanted))
        return Protocol.plain(
            nuclear,
            sensor * step,
            axis,
            sample_times,
            averages=averages,
            shot_duration=shot_duration,
            spectral_axis=spectral_axis,
            reference_shift_ppm=reference_shift_ppm,
        )


@dataclass(frozen=True, kw_only=True)
class FullRaster(Table):
    """Every lattice point once for every sensing axis, row by row."""

    def object_steps(self, grid: Grid, random: np.random.Generator) -> tuple[Steps, Steps]:
        """All lattice points, repeated for each axis."""
        points = lattice_points(grid)
        axis = np.repeat(np.array(self.axes, np.int64), len(points))
        return np.tile(points, (len(self.axes), 1)), axis


@dataclass(frozen=True, kw_only=True)
class _Drawn(Table):
    """A stated number of shots, each lattice point at most once per sensing axis."""

    shots: int

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.shots < 1:
            raise InputError(f"{self.shots} shots", "table of shots", "use at least 1")

    @abstractmethod
    def log_density(self, points: Steps, grid: Grid) -> NDArray[np.float64]:
        """Logarithm of the relative density at lattice points (points, 2), up to a constant."""

    def object_steps(self, grid: Grid, random: np.random.Generator) -> tuple[Steps, Steps]:
        """Points drawn without replacement, separately for each place in the turn of axes."""
        points = lattice_points(grid)
        turns = len(self.axes)
        if -(-self.shots // turns) > len(points):
            raise InputError(
                f"{self.shots} shots over {turns} axes on a lattice of {len(points)} points",
                "table of shots",
                "ask for fewer shots and more averages",
            )
        chosen = np.empty((self.shots, 2), np.int64)
        density = self.log_density(points, grid)
        for turn in range(min(turns, self.shots)):
            rows = np.arange(turn, self.shots, turns)
            # Largest keys of log density + Gumbel noise: a draw without replacement.
            order = np.argsort(-(density + random.gumbel(size=len(points))), kind="stable")
            chosen[rows] = points[order[: len(rows)]]
        return chosen, np.resize(np.array(self.axes, np.int64), self.shots)


@dataclass(frozen=True, kw_only=True)
class UniformRandom(_Drawn):
    """Lattice points drawn with equal chance."""

    def log_density(self, points: Steps, grid: Grid) -> NDArray[np.float64]:
        """Zero everywhere."""
        return np.zeros(len(points))


@dataclass(frozen=True, kw_only=True)
class VariableDensity(_Drawn):
    """Lattice points drawn with a Gaussian density around zero.

    `width` is the density's standard deviation per axis, in units of the grid's Nyquist
    wavenumber π/d.
    """

    width: float = 0.4

    def __post_init__(self) -> None:
        super().__post_init__()
        if not 0 < self.width < np.inf:
            raise InputError(f"width {self.width} must be positive", "table of shots")

    def log_density(self, points: Steps, grid: Grid) -> NDArray[np.float64]:
        """−|u / Nyquist|² / (2 width²)."""
        nyquist = np.array(grid.shape[:0:-1]) / 2
        return np.asarray(-((points / nyquist) ** 2).sum(axis=1) / (2 * self.width**2))


@dataclass(frozen=True, kw_only=True)
class LowDiscrepancy(VariableDensity):
    """The Gaussian density of `VariableDensity`, filled evenly by a scrambled Halton sequence.

    Points of the sequence pass through the normal quantile to the nearest free lattice point.
    Source: Halton, Numerische Mathematik 2:84 (1960).
    """

    def object_steps(self, grid: Grid, random: np.random.Generator) -> tuple[Steps, Steps]:
        """One sequence for each place in the turn of axes."""
        low, high = _band(grid)
        points, nyquist = lattice_points(grid), np.array(grid.shape[:0:-1]) / 2
        axis = np.resize(np.array(self.axes, np.int64), self.shots)
        chosen = np.empty((self.shots, 2), np.int64)
        for turn in range(min(len(self.axes), self.shots)):
            rows = np.arange(turn, self.shots, len(self.axes))
            if len(rows) > len(points):
                raise InputError(f"{len(rows)} shots on {len(points)} points", "table of shots")
            sequence = qmc.Halton(2, rng=random)
            free = np.ones(len(points), bool)
            for row in rows:
                wanted = norm.ppf(sequence.random(1)[0]) * self.width * nyquist
                distance = ((points - np.clip(wanted, low, high)) ** 2).sum(axis=1)
                place = int(np.argmin(np.where(free, distance, np.inf)))
                free[place], chosen[row] = False, points[place]
        return chosen, axis


def lattice_points(grid: Grid) -> Steps:
    """All lateral lattice points, (ny · nx, 2) steps along (x, y), row by row."""
    low, high = _band(grid)
    x, y = (np.arange(a, b + 1) for a, b in zip(low, high, strict=True))
    return np.stack([np.tile(x, len(y)), np.repeat(y, len(x))], axis=1)


def lateral_factor(protocol: Protocol, grid: Grid) -> float:
    """Lateral undersampling: lattice points of a full raster over the shots taken."""
    return grid.shape[1] * grid.shape[2] / len(protocol)


def _band(grid: Grid) -> tuple[Steps, Steps]:
    """Lowest and highest lattice step along (x, y)."""
    count = np.array(grid.shape[:0:-1])
    low = -(count // 2)
    return low, low + count - 1
