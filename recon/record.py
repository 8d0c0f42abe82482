"""What was measured: complex field samples of every shot, with everything needed to read them.

A record is one HDF5 file of kind "record":

    samples         complex64 (shots, times, channels y, channels x), tesla
    protocol/       the table of shots
    instrument      the instrument as JSON
    description     grid, species and notes as JSON, without maps
    noise_sd_T      attribute: standard deviation of one complex sample at one average
    view_um         attribute: field of view (y, x)
    channel_weight  float32 (channels y, channels x), only where channels differ: inverse noise
                    variance relative to the stated one, 0 for a channel that is not used

The samples are stored contiguously, so that reading runs at the speed of the file system.
"""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import AbstractContextManager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import h5py
import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.specimen import Specimen
from recon.store import StoreFile, open_store, read_dataset, read_text, reading, write_store

KIND = "record"
BATCH_BYTES = 4 * 2**20
"""Size of the buffer through which a record is read or written, unless a batch is stated."""

Samples = NDArray[np.complex64]


@dataclass(frozen=True, eq=False)
class Record:
    """Samples with their instrument, protocol and the specimen's description.

    Made by `open` or `from_arrays`. A record in a file holds no open handle: the file is opened
    for each pass, so a record can be handed to other processes.

    Attributes
    ----------
    instrument, protocol
        What was measured with, and how.
    description_json
        Grid, species and notes as `Specimen.description_json` gives them; "" if unknown.
    noise_sd
        Standard deviation of one complex sample at one average, tesla: σ² = E|noise|².
    source
        The file, or the samples themselves.
    channel_weight
        Inverse noise variance of every channel relative to 1/noise_sd², (channels y, channels x);
        None where channels are alike.
    """

    instrument: Instrument
    protocol: Protocol
    description_json: str
    noise_sd: float
    source: Path | Samples
    channel_weight: NDArray[np.float32] | None = None

    @classmethod
    def open(cls, path: Path | str) -> Record:
        """Open a record and check that its parts fit; samples are read by `shots`.

        Raises
        ------
        InputError
            The file is missing, truncated, of another kind or damaged, or the samples do not fit
            the protocol and the instrument.
        """
        path = Path(path)
        with open_store(path, KIND) as file, reading(str(path)):
            instrument = Instrument.from_json(read_text(file, "instrument", str(path)))
            group = file.get("protocol")
            if not isinstance(group, h5py.Group):
                raise InputError("group 'protocol' is missing", str(path))
            protocol = Protocol.read(group, str(path))
            description = read_text(file, "description", str(path))
            noise_sd = _noise(file.attrs.get("noise_sd_T", np.nan), str(path))
            samples = read_dataset(file, "samples", str(path))
            _check_samples(samples.shape, samples.dtype, instrument, protocol, str(path))
            weight = None
            if "channel_weight" in file:
                weight = _weight(file["channel_weight"][()], instrument, str(path))
        return cls(instrument, protocol, description, noise_sd, path, weight)

    @classmethod
    def from_arrays(
        cls,
        instrument: Instrument,
        protocol: Protocol,
        samples: NDArray[Any],
        description_json: str = "",
        *,
        noise_sd: float,
        channel_weight: NDArray[Any] | None = None,
    ) -> Record:
        """A record in memory; samples (shots, times, channels y, channels x) become complex64."""
        held = np.ascontiguousarray(samples, np.complex64)
        _check_samples(held.shape, held.dtype, instrument, protocol, KIND)
        weight = None if channel_weight is None else _weight(channel_weight, instrument, KIND)
        return cls(instrument, protocol, description_json, _noise(noise_sd, KIND), held, weight)

    def __len__(self) -> int:
        return len(self.protocol)

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """Shape of the samples: (shots, times, channels y, channels x)."""
        return samples_shape(self.instrument, self.protocol)

    @property
    def nbytes(self) -> int:
        """Size of the samples in bytes."""
        return int(np.prod(self.shape)) * 8

    @property
    def view(self) -> tuple[float, float]:
        """Field of view (y, x), metres."""
        return self.instrument.view

    @property
    def weights(self) -> NDArray[np.float64]:
        """Inverse variance of a complex sample of each shot, averages/σ², (shots,), 1/T²."""
        return np.asarray(self.protocol.averages / self.noise_sd**2)

    @cached_property
    def specimen(self) -> Specimen:
        """Grid, species and notes, without maps.

        Raises
        ------
        InputError
            The record does not say what it was taken of.
        """
        if not self.description_json:
            raise InputError("carries no description of the specimen", self.where)
        return Specimen.from_description_json(self.description_json)

    @property
    def where(self) -> str:
        """How error lines name this record."""
        return str(self.source) if isinstance(self.source, Path) else KIND

    def shots(self, batch: int | None = None) -> Iterator[tuple[slice, Samples]]:
        """Read the record once, in order, in bounded memory.

        Yields (shots, samples (n, times, channels y, channels x)). The array is a buffer that the
        next step fills again: copy what has to stay.

        Parameters
        ----------
        batch
            Shots per step; by default as many as fit in `BATCH_BYTES`.

        Raises
        ------
        InputError
            A sample is not finite (names the shot), or the file cannot be read.
        """
        size = batch or _batch(self.shape)
        if size < 1:
            raise InputError(f"batch of {size} shots", self.where, "use at least 1")
        if isinstance(self.source, Path):
            yield from self._shots_from_file(self.source, size)
            return
        for where in _slices(len(self), size):
            block = self.source[where]
            check_finite(block, where.start, self.where)
            yield where, block

    def _shots_from_file(self, path: Path, size: int) -> Iterator[tuple[slice, Samples]]:
        buffer = np.empty((min(size, len(self)), *self.shape[1:]), np.complex64)
        with open_store(path, KIND) as file, path.open("rb", buffering=0) as raw:
            samples = read_dataset(file, "samples", str(path))
            _check_samples(samples.shape, samples.dtype, self.instrument, self.protocol, str(path))
            for where in _slices(len(self), size):
                block = buffer[: where.stop - where.start]
                with reading(str(path)):
                    _read_shots(samples, raw, where.start, block)
                check_finite(block, where.start, self.where)
                yield where, block

    def samples_in_memory(self) -> Samples:
        """All samples as one array; for a record in memory, the array itself."""
        if not isinstance(self.source, Path):
            check_finite(self.source, 0, self.where)
            return self.source
        whole = np.empty(self.shape, np.complex64)
        for where, block in self.shots():
            whole[where] = block
        return whole

    def save(self, path: Path | str) -> None:
        """Write the record as a file, atomically."""
        writer = RecordWriter(
            path,
            self.instrument,
            self.protocol,
            self.description_json,
            self.noise_sd,
            channel_weight=self.channel_weight,
        )
        with writer:
            for _, block in self.shots():
                writer.append(block)


class RecordWriter:
    """Writes a record shot by shot; the file takes its name only when it is complete.

    Use as a context manager; `append` the shots in the order of the protocol. On any failure, a
    full disk among them, the partial file is removed and an existing file is untouched.

    Raises
    ------
    InputError
        The folder cannot be written, the disk is full, a sample is not finite, the samples do not
        fit, or shots are missing at the end.
    """

    def __init__(
        self,
        path: Path | str,
        instrument: Instrument,
        protocol: Protocol,
        description_json: str,
        noise_sd: float,
        *,
        channel_weight: NDArray[Any] | None = None,
    ) -> None:
        self.path = Path(path)
        self.shape = samples_shape(instrument, protocol)
        self.written = 0
        self._weight = (
            None if channel_weight is None else _weight(channel_weight, instrument, str(path))
        )
        self._contents = (instrument, protocol, description_json, _noise(noise_sd, str(path)))
        self._store: AbstractContextManager[StoreFile] | None = None
        self._file: StoreFile | None = None

    def __enter__(self) -> Self:
        instrument, protocol, description, noise_sd = self._contents
        store = write_store(self.path, KIND)
        file = store.__enter__()
        try:
            file["instrument"] = instrument.to_json()
            file["description"] = description
            protocol.write(file.create_group("protocol"))
            file.attrs["noise_sd_T"] = noise_sd
            file.attrs["view_um"] = [edge * 1e6 for edge in instrument.view]
            if self._weight is not None:
                file.create_dataset("channel_weight", data=self._weight, track_times=False)
            file.create_dataset("samples", self.shape, np.complex64, track_times=False)
            file.check()
        except BaseException as error:
            store.__exit__(type(error), error, error.__traceback__)
            raise
        self._store, self._file = store, file
        return self

    def append(self, samples: NDArray[Any]) -> None:
        """Write the next shots: (n, times, channels y, channels x), tesla."""
        if self._file is None:
            raise RuntimeError("append is for use inside the `with` block")
        block = np.ascontiguousarray(samples, np.complex64)
        if block.shape[1:] != self.shape[1:]:
            what = f"samples per shot have shape {block.shape[1:]}, not {self.shape[1:]}"
            raise InputError(what, str(self.path))
        stop = self.written + len(block)
        if stop > len(self):
            what = f"samples of {stop} shots, the protocol has {len(self)}"
            raise InputError(what, str(self.path))
        check_finite(block, self.written, str(self.path))
        self._file["samples"].write_direct(block, dest_sel=np.s_[self.written : stop])
        self._file.check()
        self.written = stop

    def __len__(self) -> int:
        return self.shape[0]

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        store, self._store, self._file = self._store, None, None
        assert store is not None
        if error is None and self.written < len(self):
            what = f"samples of {self.written} shots, the protocol has {len(self)}"
            error = InputError(what, str(self.path), "append every shot")
            kind = InputError
            store.__exit__(kind, error, None)
            raise error
        store.__exit__(kind, error, trace)


def samples_shape(instrument: Instrument, protocol: Protocol) -> tuple[int, int, int, int]:
    """Shape of a record's samples: (shots, times, channels y, channels x)."""
    return (len(protocol), len(protocol.sample_times), *instrument.detector.channels())


def check_finite(block: Samples, first_shot: int, where: str) -> None:
    """Raise one line naming the first shot with a NaN or infinite sample; one cheap pass."""
    parts = block.reshape(-1).view(np.float32)
    with np.errstate(over="ignore", invalid="ignore"):
        if np.isfinite(np.dot(parts, parts)):
            return
    bad = np.flatnonzero(~np.isfinite(block).all(axis=(1, 2, 3)))
    if bad.size:
        what = f"shot {first_shot + bad[0]} has a sample that is not finite"
        raise InputError(what, where, "leave the shot out or mend it")


def _check_samples(
    shape: tuple[int, ...],
    dtype: np.dtype[Any],
    instrument: Instrument,
    protocol: Protocol,
    where: str,
) -> None:
    if dtype != np.complex64 or len(shape) != 4:
        raise InputError(f"samples are {dtype} {shape}, not complex64 with four axes", where)
    wanted = samples_shape(instrument, protocol)
    names = ("shots, the protocol has", "times, the protocol has")
    for found, right, name in zip(shape, wanted, names, strict=False):
        if found != right:
            raise InputError(f"samples of {found} {name} {right}", where)
    if shape[2:] != wanted[2:]:
        what = f"samples of {shape[2:]} channels (y, x), the detector has {wanted[2:]}"
        raise InputError(what, where)


def _read_shots(samples: h5py.Dataset, raw: io.FileIO, start: int, block: Samples) -> None:
    """Fill `block` with the shots from `start` on, past the HDF5 library where it can be."""
    offset = samples.id.get_offset()
    if offset is None:  # stored in chunks
        samples.read_direct(block, np.s_[start : start + len(block)])
        return
    left = block.reshape(-1).view(np.uint8).data
    raw.seek(offset + start * block[0].nbytes)
    while len(left):
        count = raw.readinto(left)
        if not count:
            raise OSError("the file ends within the samples")
        left = left[count:]


def _noise(value: Any, where: str) -> float:
    noise_sd = float(value)
    if not (np.isfinite(noise_sd) and noise_sd > 0):
        raise InputError(f"noise_sd {noise_sd} T must be positive", where, "state the noise")
    return noise_sd


def _weight(given: NDArray[Any], instrument: Instrument, where: str) -> NDArray[np.float32]:
    weight = np.asarray(given, np.float32)
    wanted = instrument.detector.channels()
    if weight.shape != wanted:
        raise InputError(f"channel_weight is {weight.shape}, the detector has {wanted}", where)
    if not np.isfinite(weight).all() or weight.min() < 0 or not weight.any():
        raise InputError(
            "channel_weight must be finite, not negative, and not zero all over", where
        )
    return weight


def _batch(shape: tuple[int, ...]) -> int:
    return max(1, BATCH_BYTES // (8 * int(np.prod(shape[1:]))))


def _slices(count: int, size: int) -> Iterator[slice]:
    for start in range(0, count, size):
        yield slice(start, min(start + size, count))
