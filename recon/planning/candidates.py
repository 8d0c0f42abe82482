"""Encodings to choose from: every lateral lattice wavevector for every kind of shot.

A *kind* is a sensing axis, an axial wavenumber, a sensor wavevector and an evolution time. Its
response to an object frequency depends on κ' + k alone, so all lateral nuclear wavevectors of a
kind are shifts of one another and are scored together by a correlation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.limits import Limits, Loss
from recon.protocol import REFERENCE_SHIFT_PPM, Protocol, SpectralAxis

FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]


@dataclass(frozen=True)
class Kind:
    """What shots may share.

    Attributes
    ----------
    axis
        Sensing axis, 1 to 4.
    axial
        k_z, rad/m.
    sensor
        q in lattice steps (y, x).
    evolution_s
        Time t1 before the first sample.
    """

    axis: int = 1
    axial: float = 0.0
    sensor: tuple[int, int] = (0, 0)
    evolution_s: float = 0.0


@dataclass(frozen=True, eq=False)
class Candidates:
    """All pairs of a kind and a lateral nuclear wavevector that the limits allow.

    Attributes
    ----------
    kinds
        The kinds.
    steps
        Lateral nuclear wavevectors in lattice steps (y, x), (lattice, 2).
    allowed
        (kinds, lattice).
    seconds
        Duration of each shot, (kinds, lattice).
    gain
        Share of the signal's power that is left of each shot, (kinds, lattice).
    """

    grid: Grid
    kinds: tuple[Kind, ...]
    steps: IntArray
    allowed: NDArray[np.bool_]
    seconds: FloatArray
    gain: FloatArray

    @classmethod
    def of(
        cls,
        grid: Grid,
        instrument: Instrument,
        kinds: tuple[Kind, ...],
        limits: Limits | None = None,
        loss: Loss | None = None,
    ) -> Candidates:
        """Every lattice point for every kind.

        Parameters
        ----------
        loss
            What diffusion takes; nothing if not given.

        Raises
        ------
        InputError
            There is no kind, or the gradients reach no candidate.
        """
        if not kinds:
            raise InputError("no kinds of shot to choose from", "candidates")
        limits = limits or Limits()
        _, ny, nx = grid.shape
        rows, columns = (np.arange(-(n // 2), n - n // 2) for n in (ny, nx))
        steps = np.stack(np.meshgrid(rows, columns, indexing="ij"), axis=-1).reshape(-1, 2)
        step_y, step_x = grid.lattice_step
        allowed, seconds, gain = [], [], []
        for kind in kinds:
            nuclear = np.empty((len(steps), 3))
            nuclear[:, 0], nuclear[:, 1] = steps[:, 1] * step_x, steps[:, 0] * step_y
            nuclear[:, 2] = kind.axial
            sensor = np.array([kind.sensor[1] * step_x, kind.sensor[0] * step_y])
            allowed.append(limits.allowed(instrument, nuclear, sensor))
            seconds.append(limits.shot_time(instrument, nuclear, kind.evolution_s))
            gain.append(np.ones(len(steps)) if loss is None else loss.power_left(nuclear))
        if not np.any(allowed):
            raise InputError(
                "the gradients reach none of the candidates",
                "candidates",
                "allow longer pulses or a larger duty cycle, or use larger voxels",
            )
        return cls(grid, kinds, steps, np.array(allowed), np.array(seconds), np.array(gain))

    @property
    def count(self) -> int:
        """Number of allowed candidates."""
        return int(self.allowed.sum())

    def protocol(
        self,
        chosen: list[tuple[int, int]],
        sample_times: FloatArray,
        amplitude: FloatArray | complex = 1.0,
        spectral_axis: SpectralAxis = SpectralAxis.EVOLVE_THEN_ENCODE,
        reference_shift_ppm: float = REFERENCE_SHIFT_PPM,
    ) -> Protocol:
        """A table of the chosen (kind, lattice place) pairs; repeated pairs become averages."""
        unique = list(dict.fromkeys(chosen))
        averages = np.array([chosen.count(pair) for pair in unique])
        step_y, step_x = self.grid.lattice_step
        nuclear, sensor = np.zeros((len(unique), 3)), np.zeros((len(unique), 2))
        for row, (kind, place) in enumerate(unique):
            y, x = self.steps[place]
            nuclear[row] = x * step_x, y * step_y, self.kinds[kind].axial
            sensor[row] = (
                self.kinds[kind].sensor[1] * step_x,
                self.kinds[kind].sensor[0] * step_y,
            )
        seconds = np.array([self.seconds[pair] for pair in unique]) * averages
        return Protocol(
            nuclear_wavevector=nuclear,
            sensor_wavevector=sensor,
            sensing_axis=np.array([self.kinds[kind].axis for kind, _ in unique]),
            amplitude=np.broadcast_to(amplitude, len(unique)).astype(complex),
            averages=averages,
            clock_time=np.concatenate([[0.0], np.cumsum(seconds)[:-1]]),
            sample_times=np.asarray(sample_times, float),
            evolution_time=np.array([self.kinds[kind].evolution_s for kind, _ in unique]),
            spectral_axis=spectral_axis,
            reference_shift_ppm=reference_shift_ppm,
        )


def camera_kinds(
    axes: tuple[int, ...] = (1,),
    axial_rad_per_um: tuple[float, ...] = (0.0,),
    sensor_steps: tuple[tuple[int, int], ...] = ((0, 0),),
    evolution_s: tuple[float, ...] = (0.0,),
) -> tuple[Kind, ...]:
    """All combinations."""
    return tuple(
        Kind(axis, wave * 1e6, sensor, time)
        for axis in axes
        for wave in axial_rad_per_um
        for sensor in sensor_steps
        for time in evolution_s
    )


def axial_wavenumbers(grid: Grid, instrument: Instrument) -> tuple[float, ...]:
    """k_z in steps of half a lattice step, π/(nz dz), up to a plane's π/dz or the limit, rad/µm."""
    nz, edge = grid.shape[0], grid.voxel[0]
    step = np.pi / (nz * edge)
    most = min(np.pi / edge, float(instrument.nuclear_wavevector_limit[2]))
    count = int(np.floor(most / step * (1 + 1e-9)))
    return tuple(float(wave) * 1e-6 for wave in np.arange(-count, count + 1) * step)


def detector_kinds(
    grid: Grid,
    wavenumber_rad_per_um: tuple[float, ...],
    directions: int = 8,
    axes: tuple[int, ...] = (1,),
) -> tuple[Kind, ...]:
    """Sensor wavevectors near rings, for one detector: q picks the field frequency it sees."""
    step_y, step_x = grid.lattice_step
    angles = 2 * np.pi * np.arange(directions) / directions
    found: dict[Kind, None] = {}
    for wave in wavenumber_rad_per_um:
        for angle in angles:
            y, x = wave * 1e6 * np.sin(angle) / step_y, wave * 1e6 * np.cos(angle) / step_x
            sensor = (int(np.rint(y)), int(np.rint(x)))
            if sensor != (0, 0):
                found.update({Kind(axis, 0.0, sensor): None for axis in axes})
    return tuple(found)
