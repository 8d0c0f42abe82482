"""Records of photon counts: one HDF5 file of kind "counts" that grows while it is measured.

    signal, reference   uint16 or uint32 (rows, frames, channels y, channels x), one chunk per row
    shot                int64 (rows,): which shot of the protocol a row measured
    clock_time          float64 (rows,): when the row began, seconds
    protocol/           the table of shots that was to be measured
    instrument, description, acquisition    JSON
    protocol_sha256     attribute: digest of the table

The frames of a row run through the windows in turn. A row counts once its entry in `shot` is
there: it is written last. The file is in HDF5's single-writer, multiple-reader mode, so it can be
read while it grows and stays readable if its writer dies.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from recon.counts.acquisition import Acquisition
from recon.counts.truncated import open_padded, rows_present, superblock
from recon.errors import InputError
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.specimen import Specimen
from recon.store import read_dataset, read_text, reading
from recon.store import KIND as KIND_ATTRIBUTE

KIND = "counts"
COUNT_TYPES = (np.dtype(np.uint16), np.dtype(np.uint32))
BATCH_BYTES = 16 * 2**20

Counts = NDArray[Any]


@dataclass(frozen=True, eq=False)
class CountsRecord:
    """Counts with everything needed to read them; the file is opened for each pass.

    Attributes
    ----------
    path
        The file.
    instrument, protocol, acquisition
        What was measured with, and how.
    description_json
        Grid, species and notes as `Specimen.description_json` gives them; "" if unknown.
    shot
        Which shot of the protocol each whole row measured, (rows,).
    clock_time
        When each row began, (rows,), seconds.
    cut
        What is missing at the end, in words; "" if nothing is.
    """

    path: Path
    instrument: Instrument
    protocol: Protocol
    acquisition: Acquisition
    description_json: str
    shot: NDArray[np.int64]
    clock_time: NDArray[np.float64]
    dtype: np.dtype[Any]
    cut: str = ""

    @classmethod
    def open(cls, path: Path | str) -> CountsRecord:
        """Open a record, also while it grows or if it was cut off; whole rows count.

        Raises
        ------
        InputError
            The file is missing, damaged, of another kind, locked by another program, its counts
            have the wrong type or shape, or its table of shots is not the one it was begun with.
        """
        path = Path(path)
        with _opened(path) as (file, cut), reading(str(path)):
            instrument = Instrument.from_json(read_text(file, "instrument", str(path)))
            protocol = Protocol.read(_group(file, path), str(path))
            acquisition = Acquisition.from_json(read_text(file, "acquisition", str(path)))
            description = read_text(file, "description", str(path))
            stated = str(file.attrs.get("protocol_sha256", ""))
            if stated != protocol.digest():
                raise InputError(
                    "its table of shots is not the one the measurement began with (digests differ)",
                    str(path),
                    "put the right protocol back",
                )
            signal = read_dataset(file, "signal", str(path))
            shape = row_shape(instrument, protocol, acquisition)
            for name in ("signal", "reference"):
                _check_counts(read_dataset(file, name, str(path)), shape, name, path)
            shot = np.asarray(read_dataset(file, "shot", str(path))[()], np.int64)
            clock = np.asarray(read_dataset(file, "clock_time", str(path))[()], np.float64)
            whole, cut = _whole_rows(file, len(shot), cut, path)
            dtype = signal.dtype
        acquisition.check(instrument, protocol)
        return cls(
            path,
            instrument,
            protocol,
            acquisition,
            description,
            shot[:whole],
            clock[:whole],
            dtype,
            cut,
        )

    def __len__(self) -> int:
        return len(self.shot)

    @property
    def row_shape(self) -> tuple[int, int, int]:
        """(frames, channels y, channels x)."""
        return row_shape(self.instrument, self.protocol, self.acquisition)

    @property
    def nbytes(self) -> int:
        """Size of the whole rows' counts in bytes, uncompressed."""
        return 2 * len(self) * int(np.prod(self.row_shape)) * self.dtype.itemsize

    @property
    def specimen(self) -> Specimen:
        """Grid, species and notes, without maps."""
        if not self.description_json:
            raise InputError("carries no description of the specimen", str(self.path))
        return Specimen.from_description_json(self.description_json)

    def row(self, number: int) -> tuple[Counts, Counts]:
        """Signal and reference of one row, (frames, channels y, channels x)."""
        with _opened(self.path) as (file, _), reading(str(self.path)):
            return file["signal"][number], file["reference"][number]

    def rows(self, batch: int | None = None) -> Iterator[tuple[slice, Counts, Counts]]:
        """Read the whole rows once, in order: (rows, signal, reference), each (n, frames, y, x).

        The arrays are buffers that the next but one step fills again.
        """
        size = batch or max(1, BATCH_BYTES // (2 * self.nbytes // max(1, 2 * len(self))))
        shape = (min(size, max(1, len(self))), *self.row_shape)
        buffers = [(np.empty(shape, self.dtype), np.empty(shape, self.dtype)) for _ in range(3)]
        with _opened(self.path) as (file, _), reading(str(self.path)):
            signal, reference = file["signal"], file["reference"]
            for turn, start in enumerate(range(0, len(self), size)):
                where = slice(start, min(start + size, len(self)))
                parts = [one[: where.stop - start] for one in buffers[turn % 3]]
                signal.read_direct(parts[0], np.s_[where])
                reference.read_direct(parts[1], np.s_[where])
                yield where, parts[0], parts[1]


def row_shape(self) -> tuple[int, int, int]:
        """(frames, channels y, channels x)."""
        return row_shape(self.instrument, self.protocol, self.acquisition)

    @property
    def nbytes(self) -> int:
        """Size of the whole rows' counts in bytes, uncompressed."""
        return 2 * len(self) * int(np.prod(self.row_shape)) * self.dtype.itemsize

    @property
    def specimen(self) -> Specimen:
        """Grid, species and notes, without maps."""
        if not self.description_json:
            raise InputError("carries no description of the specimen", str(self.path))
        return Specimen.from_description_json(self.description_json)

    def row(self, number: int) -> tuple[Counts, Counts]:
        """Signal and reference of one row, (frames, channels y, channels x)."""
        with _opened(self.path) as (file, _), reading(str(self.path)):
            return file["signal"][number], file["reference"][number]

    def rows(self, batch: int | None = None) -> Iterator[tuple[slice, Counts, Counts]]:
        """Read the whole rows once, in order: (rows, signal, reference), each (n, frames, y, x).

        The arrays are buffers that the next but one step fills again.
        """
        size = batch or max(1, BATCH_BYTES // (2 * self.nbytes // max(1, 2 * len(self))))
        shape = (min(size, max(1, len(self))), *self.row_shape)
        buffers = [(np.empty(shape, self.dtype), np.empty(shape, self.dtype)) for _ in range(3)]
        with _opened(self.path) as (file, _), reading(str(self.path)):
            signal, reference = file["signal"], file["reference"]
            for turn, start in enumerate(range(0, len(self), size)):
                where = slice(start, min(start + size, len(self)))
                parts = [one[: where.stop - start] for one in buffers[turn % 3]]
                signal.read_direct(parts[0], np.s_[where])
                reference.read_direct(parts[1], np.s_[where])
                yield where, parts[0], parts[1]


class CountsWriter:
    """Appends rows to a new file, or to one that an earlier writer of the same table left.

    Use as a context manager. Every row that `append` returned from is kept, whatever happens
    later.

    Parameters
    ----------
    path
        The file; continued if it exists.
    dtype
        uint16 or uint32.
    compression
        Level of gzip from 1 to 9, or None for plain chunks, which are written and read fastest.

    Raises
    ------
    InputError
        The file cannot be written, belongs to another measurement, the disk is full, or rows do
        not fit.
    """

    def __init__(
        self,
        path: Path | str,
        instrument: Instrument,
        protocol: Protocol,
        acquisition: Acquisition,
        description_json: str = "",
        *,
        dtype: Any = np.uint16,
        compression: int | None = 1,
    ) -> None:
        acquisition.check(instrument, protocol)
        self.path = Path(path)
        self.shape = row_shape(instrument, protocol, acquisition)
        self.dtype = np.dtype(dtype)
        if self.dtype not in COUNT_TYPES:
            raise InputError(f"counts of type {self.dtype}", str(path), "use uint16 or uint32")
        self._contents = (instrument, protocol, acquisition, description_json)
        self._compression = compression
        self._file: h5py.File | None = None
        self._broken = False

    def __enter__(self) -> Self:
        try:
            if self.path.exists():
                self._file = self._continued()
            else:
                self.path.parent.mkdir(parents=True, exist_ok=True)
                self._file = self._begun()
            self._file.swmr_mode = True
        except OSError as error:
            raise write_failure(self.path, error) from error
        return self

    def _begun(self) -> h5py.File:
        instrument, protocol, acquisition, description = self._contents
        file = h5py.File(self.path, "x", libver="latest")
        file.attrs[KIND_ATTRIBUTE], file.attrs[FORMAT] = KIND, FORMAT_VERSION
        file.attrs["protocol_sha256"] = protocol.digest()
        file["instrument"], file["description"] = instrument.to_json(), description
        file["acquisition"] = acquisition.to_json()
        protocol.write(file.create_group("protocol"))
        filters = (
            {"compression": "gzip", "compression_opts": self._compression, "shuffle": True}
            if self._compression
            else {}
        )
        for name in ("signal", "reference"):
            file.create_dataset(
                name,
                (0, *self.shape),
                self.dtype,
                maxshape=(None, *self.shape),
                chunks=(1, *self.shape),
                track_times=False,
                **filters,
            )
        for name, kind in (("shot", np.int64), ("clock_time", np.float64)):
            file.create_dataset(name, (0,), kind, maxshape=(None,), chunks=(256,))
        return file

    def _continued(self) -> h5py.File:
        before = CountsRecord.open(self.path)
        same = before.protocol.digest() == self._contents[1].digest()
        if not same or before.row_shape != self.shape or before.dtype != self.dtype:
            raise InputError("holds another measurement", str(self.path), "choose another name")
        head = superblock(self.path)
        if head is not None and head[1]:
            _recovered(self.path)
        file = h5py.File(self.path, "r+", libver="latest")
        for name in ("signal", "reference", "shot", "clock_time"):
            file[name].resize(len(before), axis=0)
        return file

    def append(self, shot: int, clock_time: float, signal: Counts, reference: Counts) -> None:
        """Write one row, (frames, channels y, channels x) each, and make it visible to readers."""
        file = self._file
        if file is None:
            raise RuntimeError("append is for use inside the `with` block")
        for name, counts in (("signal", signal), ("reference", reference)):
            if counts.shape != self.shape or counts.dtype != self.dtype:
                raise InputError(
                    f"{name} of shot {shot} is {counts.dtype} {counts.shape}, not {self.dtype} "
                    f"{self.shape}",
                    str(self.path),
                )
        if shutil.disk_usage(self.path.parent).free < 4 * signal.nbytes + 2**20:
            raise InputError("the disk is full", str(self.path), "make room and go on")
        try:
            row = len(file["shot"])
            for name, counts in (("signal", signal), ("reference", reference)):
                file[name].resize(row + 1, axis=0)
                file[name][row] = counts
            file.flush()
            for name, value in (("clock_time", clock_time), ("shot", shot)):
                file[name].resize(row + 1, axis=0)
                file[name][row] = value
            file.flush()
        except (OSError, RuntimeError) as error:
            self._broken = True
            reason = error if isinstance(error, OSError) else OSError(str(error))
            raise write_failure(self.path, reason) from error

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        file, self._file = self._file, None
        if file is None:
            return
        try:
            file.close()
        except (OSError, RuntimeError):
            if not self._broken:
                raise


def row_shape(
    instrument: Instrument, protocol: Protocol, acquisition: Acquisition
) -> tuple[int, int, int]:
    """(frames, channels y, channels x) of one row."""
    frames = len(protocol.sample_times) * acquisition.frames_per_window
    rows, columns = instrument.detector.channels()
    return frames, rows, columns


@contextmanager
def _opened(path: Path) -> Iterator[tuple[h5py.File, str]]:
    """The file, and how much of its end is missing."""
    if not path.is_file():
        raise InputError("does not exist", str(path), "give an HDF5 file of counts")
    file, cut = _open(path)
    try:
        with reading(str(path)):
            kind = file.attrs.get(KIND_ATTRIBUTE)
        if kind != KIND:
            raise InputError(f"holds a {kind}, not {KIND}", str(path))
        yield file, cut
    finally:
        file.close()


def _open(path: Path) -> tuple[h5py.File, str]:
    """Open a file that is whole, cut off, or growing; and say what is missing."""
    head = superblock(path)
    if head is None:
        raise InputError("is not an HDF5 file of counts, or its start is damaged", str(path))
    stated, growing = head
    if path.stat().st_size < stated and not growing:
        return open_padded(path, stated)
    try:
        return h5py.File(path, "r", libver="latest", swmr=growing), ""
    except OSError as error:
        if "lock" in str(error) or "already open" in str(error):
            raise InputError(
                "is being written by another program", str(path), "wait until that has ended"
            ) from error
        what = "is not an HDF5 file of counts, or is damaged"
        raise InputError(what, str(path), "copy the file again") from error


def holds_counts(path: Path | str) -> bool:
    """Whether a file is a record of counts, growing or cut off ones included."""
    try:
        with _opened(Path(path)):
            return True
    except InputError as error:
        if "another program" in str(error):
            raise
        return False


def _group(file: h5py.File, path: Path) -> h5py.Group:
    group = file.get("protocol")
    if not isinstance(group, h5py.Group):
        raise InputError("group 'protocol' is missing", str(path))
    return group


def _check_counts(
    dataset: h5py.Dataset, shape: tuple[int, int, int], name: str, path: Path
) -> None:
    if dataset.dtype not in COUNT_TYPES:
        raise InputError(
            f"{name} is {dataset.dtype}; counts are whole numbers",
            str(path),
            "store uint16 or uint32",
        )
    if dataset.shape[1:] != shape:
        raise InputError(
            f"{name} has rows of shape {dataset.shape[1:]}, the protocol, acquisition and detector "
            f"make {shape} (frames, y, x)",
            str(path),
        )


def _whole_rows(file: h5py.File, stated: int, cut: str, path: Path) -> tuple[int, str]:
    """How many rows are whole, and what is missing, in words."""
    begun = max(len(file["signal"]), len(file["reference"]))
    whole = min(stated, len(file["signal"]), len(file["reference"]), len(file["clock_time"]))
    there = rows_present(file, whole, path)
    if cut or there < whole:
        cut, whole = cut or "the file ends early", there
        return whole, f"{cut}; {whole} whole shots are used"
    if begun > whole:
        return whole, f"shot in row {whole} was cut off; {whole} whole shots are used"
    return whole, ""
