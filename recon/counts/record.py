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
from recon.store import KIND as KIND_ATTRIBUTE
from recon.store import read_dataset, read_text, reading

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
