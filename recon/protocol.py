"""The table of shots: what is encoded, along which axis it is sensed, when.

One shot j winds exp(i k_j·r) onto the nuclei and exp(i q_j·ρ) onto the sensor spins, is sensed
along axis a_j with a known complex amplitude and a number of averages, and starts at a clock
time. All shots share their sample times.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field, fields, replace
from enum import Enum
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import ArrayLike, NDArray

from recon.errors import InputError
from recon.instrument import Instrument
from recon.store import load_dataclass, read_fields, save_dataclass, write_fields

KIND = "protocol"
REFERENCE_SHIFT_PPM = 4.70
_PER_SHOT = (
    "nuclear_wavevector",
    "sensor_wavevector",
    "sensing_axis",
    "amplitude",
    "averages",
    "clock_time",
    "evolution_time",
)


class SpectralAxis(Enum):
    """How the spectral axis is sampled.

    LISTEN_AFTER_ENCODING: gradient first, then the decay is recorded; the pattern diffuses away
    meanwhile. EVOLVE_THEN_ENCODE: the shift evolves first, then a short gradient and a readout.
    """

    LISTEN_AFTER_ENCODING = "listen-after-encoding"
    EVOLVE_THEN_ENCODE = "evolve-then-encode"


@dataclass(frozen=True, eq=False)
class Protocol:
    """The table of shots; arrays are read-only and have one row per shot.

    Attributes
    ----------
    nuclear_wavevector
        k (x, y, z), rad/m, float64 (shots, 3).
    sensor_wavevector
        q (x, y), rad/m, float64 (shots, 2).
    sensing_axis
        Sensing axes 1 to 4, int64 (shots,).
    amplitude
        Flip angle, remaining polarisation and phase as one factor, complex128 (shots,).
    averages
        Number of averages, int64 (shots,), at least 1.
    clock_time
        Start of the shot, seconds, float64 (shots,).
    sample_times
        Times of the samples after excitation, seconds, ascending, float64 (times,).
    evolution_time
        Time t1 that a shot evolves before its first sample, on top of `sample_times`, seconds,
        float64 (shots,), not negative; zeros if not given. An indirect spectral axis is a table of
        (k, q, t1), and any part of it may be left out. Where the decay is listened to after the
        encoding it is time during which the wound pattern waits.
    encoding_duration
        Length of the nuclear gradient's pulse, seconds, the same for all shots. Sample times count
        it in. 0 neglects what diffuses during the pulse.
    sample_duration
        Time over which a sample is averaged, centred on its sample time, seconds. 0 neglects what
        the signal does meanwhile.
    spectral_axis
        How the spectral axis is sampled.
    reference_shift_ppm
        Shift at which the demodulated signal stands still.

    Raises
    ------
    InputError
        Shapes that differ, values that are not finite, a sensing axis other than 1 to 4, averages
        below 1, sample times that do not ascend; one line naming the shot.
    """

    nuclear_wavevector: NDArray[np.float64]
    sensor_wavevector: NDArray[np.float64]
    sensing_axis: NDArray[np.int64]
    amplitude: NDArray[np.complex128]
    averages: NDArray[np.int64]
    clock_time: NDArray[np.float64]
    sample_times: NDArray[np.float64]
    evolution_time: NDArray[np.float64] = field(default_factory=lambda: np.zeros(0))
    encoding_duration: float = 0.0
    sample_duration: float = 0.0
    spectral_axis: SpectralAxis = SpectralAxis.LISTEN_AFTER_ENCODING
    reference_shift_ppm: float = REFERENCE_SHIFT_PPM

    def __post_init__(self) -> None:
        self._set("nuclear_wavevector", np.float64, 3)
        shots = len(self.nuclear_wavevector)
        if shots == 0:
            raise InputError("has no shots", KIND, "give at least one")
        self._set("sensor_wavevector", np.float64, 2)
        self._set("sensing_axis", np.int64)
        self._set("amplitude", np.complex128)
        self._set("averages", np.int64)
        self._set("clock_time", np.float64)
        if not np.size(self.evolution_time):
            object.__setattr__(self, "evolution_time", np.zeros(shots))
        self._set("evolution_time", np.float64)
        for name in _PER_SHOT:
            rows = len(getattr(self, name))
            if rows != shots:
                raise InputError(f"{name} has {rows} shots, nuclear_wavevector {shots}", KIND)
        self._set("sample_times", np.float64)
        self._check_values()

    def _set(self, name: str, kind: type[Any], components: int | None = None) -> None:
        """Replace a field by a read-only array of the right type, or say what is wrong with it."""
        given = np.asarray(getattr(self, name))
        wanted = "(shots,)" if components is None else f"(shots, {components})"
        right = given.ndim == 1 if components is None else given.shape[1:] == (components,)
        if not right:
            raise InputError(f"{name} has shape {given.shape}, {wanted} is wanted", KIND)
        if not np.issubdtype(given.dtype, np.number):
            raise InputError(f"{name} must hold numbers, not {given.dtype}", KIND)
        if not np.isfinite(given).all():
            row = int(np.argwhere(~np.isfinite(given))[0][0])
            what = "sample" if name == "sample_times" else "shot"
            raise InputError(f"{name} of {what} {row} is not finite", KIND)
        if np.issubdtype(kind, np.integer) and not np.array_equal(given, np.round(given.real)):
            raise InputError(f"{name} must hold whole numbers", KIND)
        if np.iscomplexobj(given) and not np.issubdtype(kind, np.complexfloating):
            raise InputError(f"{name} must be real", KIND)
        array = np.array(given, kind, order="C")
        array.flags.writeable = False
        object.__setattr__(self, name, array)

    def _check_values(self) -> None:
        wrong = np.flatnonzero((self.sensing_axis < 1) | (self.sensing_axis > 4))
        if wrong.size:
            what = f"shot {wrong[0]} has sensing axis {self.sensing_axis[wrong[0]]}"
            raise InputError(what, KIND, "use 1, 2, 3 or 4")
        wrong = np.flatnonzero(self.averages < 1)
        if wrong.size:
            what = f"shot {wrong[0]} has {self.averages[wrong[0]]} averages"
            raise InputError(what, KIND, "use at least 1")
        wrong = np.flatnonzero(self.evolution_time < 0)
        if wrong.size:
            raise InputError(f"shot {wrong[0]} has a negative evolution_time", KIND)
        times = self.sample_times
        if times.size == 0 or times[0] < 0 or (np.diff(times) <= 0).any():
            raise InputError("sample_times must ascend from 0 s or later", KIND)
        for name in ("encoding_duration", "sample_duration"):
            if not 0 <= getattr(self, name) < np.inf:
                raise InputError(f"{name} must not be negative", KIND)
        if self.listens and times[0] + self.evolution_time.min() < self.encoding_duration:
            raise InputError(
                f"the first sample at {times[0] * 1e3:g} ms lies within the encoding pulse",
                KIND,
                "begin sampling after it",
            )
        if not isinstance(self.spectral_axis, SpectralAxis):
            raise InputError(f"spectral_axis {self.spectral_axis!r} is not a SpectralAxis", KIND)
        if not np.isfinite(self.reference_shift_ppm):
            raise InputError("reference_shift_ppm is not finite", KIND)

    @classmethod
    def plain(
        cls,
        nuclear_wavevector: ArrayLike,
        sensor_wavevector: ArrayLike,
        sensing_axis: ArrayLike,
        sample_times: ArrayLike,
        *,
        averages: int = 1,
        shot_duration: float = 1.0,
        spectral_axis: SpectralAxis = SpectralAxis.LISTEN_AFTER_ENCODING,
        reference_shift_ppm: float = REFERENCE_SHIFT_PPM,
    ) -> Protocol:
        """Shots of unit amplitude that follow each other every `shot_duration` seconds.

        `sensing_axis` may be one number for all shots.
        """
        nuclear = np.asarray(nuclear_wavevector, np.float64)
        shots = len(nuclear)
        axis = np.asarray(sensing_axis)
        return cls(
            nuclear_wavevector=nuclear,
            sensor_wavevector=np.asarray(sensor_wavevector, np.float64),
            sensing_axis=np.full(shots, axis) if axis.ndim == 0 else axis,
            amplitude=np.ones(shots, np.complex128),
            averages=np.full(shots, averages),
            clock_time=np.arange(shots, dtype=np.float64) * shot_duration,
            sample_times=np.asarray(sample_times, np.float64),
            spectral_axis=spectral_axis,
            reference_shift_ppm=reference_shift_ppm,
        )

    def __len__(self) -> int:
        return len(self.nuclear_wavevector)

    def subset(self, indices: ArrayLike | slice) -> Protocol:
        """The shots picked by a slice, by positions or by a mask, in that order."""
        picked = indices if isinstance(indices, slice) else np.asarray(indices)
        return replace(self, **{name: getattr(self, name)[picked] for name in _PER_SHOT})

    @property
    def evolutions(self) -> tuple[NDArray[np.float64], NDArray[np.intp]]:
        """The different evolution times, ascending, and which of them each shot has."""
        times, place = np.unique(self.evolution_time, return_inverse=True)
        return times, place

    @property
    def listens(self) -> bool:
        """The decay is listened to after the encoding, while the pattern diffuses away."""
        return self.spectral_axis is SpectralAxis.LISTEN_AFTER_ENCODING

    def wound_times(self, evolution: float = 0.0) -> NDArray[np.float64]:
        """How long the pattern has been wound when it is sampled, after `evolution`, (times,), s.

        Nothing where the shift evolves before the encoding.
        """
        if not self.listens:
            return np.zeros_like(self.sample_times)
        return self.sample_times + evolution - self.encoding_duration

    def digest(self) -> str:
        """SHA-256 of the contents, hexadecimal; equal tables have equal digests."""
        total = hashlib.sha256()
        for one in fields(self):
            value = getattr(self, one.name)
            total.update(one.name.encode())
            if isinstance(value, np.ndarray):
                total.update(str(value.shape).encode())
                total.update(value.astype(value.dtype.newbyteorder("<")).tobytes())
            else:
                total.update(str(value.value if isinstance(value, Enum) else value).encode())
        return total.hexdigest()

    def save(self, path: Path | str) -> None:
        """Write the table as an HDF5 file of kind "protocol", atomically."""
        save_dataclass(path, KIND, self)

    @classmethod
    def load(cls, path: Path | str) -> Protocol:
        """Read a table that `save` wrote."""
        return load_dataclass(path, KIND, cls)

    def write(self, group: h5py.Group) -> None:
        """Write the table into a group of an open HDF5 file."""
        write_fields(group, self)

    @classmethod
    def read(cls, group: h5py.Group, where: str) -> Protocol:
        """Read the table from a group of an open HDF5 file; `where` names it in errors."""
        return read_fields(group, cls, where)

    def check_reach(self, instrument: Instrument) -> None:
        """Check every wavevector against the gradients' limits.

        Raises
        ------
        InputError
            Naming the first shot beyond a limit, and by what factor.
        """
        _check_limit("nuclear", self.nuclear_wavevector, instrument.nuclear_wavevector_limit)
        _check_limit("sensor", self.sensor_wavevector, instrument.sensor_wavevector_limit)


def _check_limit(whose: str, wavevector: NDArray[np.float64], limit: NDArray[np.float64]) -> None:
    beyond = np.abs(wavevector) > limit * (1 + 1e-9)
    if not beyond.any():
        return
    shot = int(np.argmax(beyond.any(axis=1)))
    over = np.where(beyond[shot], np.abs(wavevector[shot]) / np.maximum(limit, 1e-300), 0)
    part = int(np.argmax(over))
    value, most = wavevector[shot, part] / 1e6, limit[part] / 1e6
    factor = f"{over[part]:.3g} times the gradient's limit" if most > 0 else "but has no gradient"
    raise InputError(
        f"shot {shot}: {whose} wavevector {value:.4g} rad/um along {'xyz'[part]} is {factor} "
        f"of {most:.4g} rad/um",
        KIND,
        "use a smaller wavevector, or a stronger or longer gradient pulse",
    )
