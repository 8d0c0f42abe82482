"""Writing records of counts: row by row, visible at once, and continued after a crash."""

from __future__ import annotations

import shutil
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import h5py
import numpy as np

from recon.counts.acquisition import Acquisition
from recon.counts.record import COUNT_TYPES, KIND, Counts, CountsRecord, row_shape
from recon.counts.truncated import superblock
from recon.errors import InputError
from recon.files import atomic_path, write_failure
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.store import FORMAT, FORMAT_VERSION
from recon.store import KIND as KIND_ATTRIBUTE


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


def _recovered(path: Path) -> None:
    """Copy what a writer that died left to a file without its mark, in the old one's place."""
    with atomic_path(path) as temporary:
        temporary.unlink()
        with (
            h5py.File(path, "r", libver="latest", swmr=True) as old,
            h5py.File(temporary, "x", libver="latest") as new,
        ):
            for name in old:
                old.copy(name, new)
            for name, value in old.attrs.items():
                new.attrs[name] = value
