"""Counts from plain files: NumPy arrays, TIFF stacks or a CSV trace, described by a TOML sidecar.

    instrument = "instrument.toml"
    protocol = "protocol.h5"
    specimen = "specimen.toml"      # optional: grid and species
    signal = "signal.npy"           # or .tif; frames of all rows one after the other
    reference = "reference.npy"
    rows = "rows.csv"               # optional: columns shot, clock_time_s; one line per row
    protocol_sha256 = "..."         # optional: digest of the table that was measured

    [acquisition]
    frame_interval_us = 125.0
    frames_per_window = 16

A single detector may give `trace = "trace.csv"` with the columns shot, clock_time_s, signal,
reference and one line per frame. Paths are relative to the sidecar. Arrays are
(rows, frames, y, x), (rows · frames, y, x), or without y and x for one detector.
"""

from __future__ import annotations

import csv
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Self

import numpy as np
from numpy.typing import NDArray
from pydantic import Field, model_validator

from recon.counts.acquisition import Acquisition
from recon.counts.plain_files import frames_in
from recon.counts.record import CountsRecord, row_shape
from recon.counts.writer import CountsWriter
from recon.errors import InputError
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.solvers.estimate import Progress, silent
from recon.specimen import Specimen
from recon.toml import Description

Counts = NDArray[Any]
Name = Annotated[str, Field(min_length=1)]


class Sidecar(Description):
    """What plain files hold and what belongs to them."""

    instrument: Name
    protocol: Name
    acquisition: Acquisition
    specimen: Name | None = None
    signal: Name | None = None
    reference: Name | None = None
    trace: Name | None = None
    rows: Name | None = None
    protocol_sha256: str | None = None

    @model_validator(mode="after")
    def _one_kind(self) -> Self:
        stacks = self.signal is not None and self.reference is not None
        if stacks == (self.trace is not None) or (self.signal is None) != (self.reference is None):
            raise ValueError("give either signal and reference, or trace")
        return self


@dataclass(frozen=True)
class Imported:
    """The new record, and what was left out, in words."""

    record: CountsRecord
    remarks: tuple[str, ...]


def import_counts(
    sidecar: Path | str,
    path: Path | str,
    *,
    compression: int | None = 1,
    progress: Progress = silent,
) -> Imported:
    """Write plain files as a record of counts.

    Raises
    ------
    InputError
        A file is missing or damaged, holds no whole numbers, does not fit protocol and detector,
        the table of shots is another one, or `path` exists.
    """
    sidecar, path = Path(sidecar), Path(path)
    if path.exists():
        raise InputError("exists already", str(path), "choose another name or remove it")
    stated = Sidecar.from_toml(sidecar)
    folder = sidecar.parent
    instrument = Instrument.from_toml(folder / stated.instrument)
    protocol = Protocol.load(folder / stated.protocol)
    if stated.protocol_sha256 not in (None, protocol.digest()):
        raise InputError(
            "protocol_sha256 is not the digest of the protocol: it belongs to another run",
            str(sidecar),
            "name the table of shots that was measured",
        )
    description = ""
    if stated.specimen is not None:
        description = Specimen.from_toml(folder / stated.specimen).description_json()
    shape = row_shape(instrument, protocol, stated.acquisition)
    source = _source(stated, folder, shape)
    numbers, clocks, remarks = _row_list(stated, folder, source, protocol)
    kind = np.uint16 if stated.acquisition.full_scale_count <= 65535 else np.uint32
    try:
        with CountsWriter(
            path,
            instrument,
            protocol,
            stated.acquisition,
            description,
            dtype=kind,
            compression=compression,
        ) as writer:
            pairs = zip(numbers, clocks, source.pairs(), strict=False)
            for row, (shot, clock, (signal, reference)) in enumerate(pairs):
                writer.append(shot, clock, _as(signal, kind, row), _as(reference, kind, row))
                progress("importing counts", (row + 1) / len(numbers))
    except BaseException:
        path.unlink(missing_ok=True)
        raise
    return Imported(CountsRecord.open(path), (*remarks, *source.remarks))


@dataclass(frozen=True, eq=False)
class _Stacks:
    """Two files of frames."""

    signal: Any
    reference: Any
    shape: tuple[int, int, int]

    @property
    def rows(self) -> int:
        return min(self.signal.rows, self.reference.rows)

    @property
    def remarks(self) -> tuple[str, ...]:
        unequal: tuple[str, ...] = ()
        if self.signal.rows != self.reference.rows:
            unequal = (
                f"signal has {self.signal.rows} rows, reference {self.reference.rows}; "
                f"{self.rows} are used",
            )
        return (*self.signal.remarks, *self.reference.remarks, *unequal)

    def pairs(self) -> Iterator[tuple[Counts, Counts]]:
        """Signal and reference of one row after the other."""
        for row in range(self.rows):
            yield self.signal.row(row), self.reference.row(row)


@dataclass(frozen=True, eq=False)
class _Trace:
    """A CSV file that was read."""

    shots: list[int]
    clocks: list[float]
    counts: NDArray[np.int64]
    remarks: tuple[str, ...]

    @property
    def rows(self) -> int:
        return len(self.shots)

    def pairs(self) -> Iterator[tuple[Counts, Counts]]:
        """Signal and reference of one row after the other."""
        for row in self.counts:
            yield row[:, 0, None, None], row[:, 1, None, None]


def _source(stated: Sidecar, folder: Path, shape: tuple[int, int, int]) -> _Stacks | _Trace:
    if stated.trace is not None:
        if shape[1:] != (1, 1):
            raise InputError(
                f"a trace has one channel, the detector has {shape[1:]}", str(folder / stated.trace)
            )
        return _read_trace(folder / stated.trace, shape[0])
    assert stated.signal is not None and stated.reference is not None
    signal, reference = (
        frames_in(folder / name, shape) for name in (stated.signal, stated.reference)
    )
    return _Stacks(signal, reference, shape)


def _read_trace(path: Path, frames: int) -> _Trace:
    table = _columns(path, ("shot", "clock_time_s", "signal", "reference"))
    whole = len(table["shot"]) // frames
    left = len(table["shot"]) - whole * frames
    if whole == 0:
        raise InputError(f"has {left} frames, a shot has {frames}", str(path), "measure a shot")
    counts = np.stack([table["signal"], table["reference"]], axis=1)[: whole * frames]
    if not np.array_equal(counts, np.round(counts)):
        raise InputError("counts must be whole numbers", str(path))
    shots = table["shot"][: whole * frames].reshape(whole, frames)
    mixed = np.flatnonzero((shots != shots[:, :1]).any(axis=1))
    if mixed.size:
        raise InputError(
            f"lines {mixed[0] * frames + 2} to {(mixed[0] + 1) * frames + 1} should be one shot of "
            f"{frames} frames, and are not",
            str(path),
            "give every frame of a shot",
        )
    clock = table["clock_time_s"][: whole * frames : frames]
    remarks = (
        (f"{path.name}: {left} frames of a shot that was cut off are left out",) if left else ()
    )
    return _Trace(
        shots[:, 0].astype(int).tolist(),
        clock.tolist(),
        counts.astype(np.int64).reshape(whole, frames, 2),
        remarks,
    )


def _row_list(
    stated: Sidecar, folder: Path, source: _Stacks | _Trace, protocol: Protocol
) -> tuple[list[int], list[float], tuple[str, ...]]:
    """Shot number and clock time of every row."""
    if isinstance(source, _Trace):
        return source.shots, source.clocks, ()
    if stated.rows is not None:
        table = _columns(folder / stated.rows, ("shot", "clock_time_s"))
        rows = len(table["shot"])
        if rows < source.rows:
            raise InputError(
                f"lists {rows} rows, the counts have {source.rows}", str(folder / stated.rows)
            )
        return table["shot"].astype(int).tolist(), table["clock_time_s"].tolist(), ()
    order = np.repeat(np.arange(len(protocol)), protocol.averages)
    if source.rows > len(order):
        raise InputError(
            f"the counts have {source.rows} rows, the protocol measures {len(order)}",
            stated.signal or "",
            "say which shot each row is (rows = ...)",
        )
    remark: tuple[str, ...] = ()
    if source.rows < len(order):
        remark = (f"the counts end after {source.rows} of {len(order)} rows",)
    return order.tolist(), protocol.clock_time[order].tolist(), remark


def _columns(path: Path, names: tuple[str, ...]) -> dict[str, NDArray[np.float64]]:
    """Columns of a CSV file with a header."""
    try:
        with path.open(newline="", encoding="utf-8") as file:
            reader = csv.reader(file)
            header = [one.strip() for one in next(reader, [])]
            absent = [name for name in names if name not in header]
            if absent:
                raise InputError(f"has no column '{absent[0]}'", str(path), f"give {names}")
            lines = [line for line in reader if line]
        picked = [header.index(name) for name in names]
        if lines and len(lines[-1]) < len(header):
            lines = lines[:-1]
        table = np.array([[float(line[place]) for place in picked] for line in lines])
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", str(path)) from error
    except (ValueError, IndexError) as error:
        raise InputError(f"is no table of numbers ({error})", str(path)) from error
    if not len(table) or not np.isfinite(table).all():
        raise InputError("has no lines, or a value that is not finite", str(path))
    return {name: table[:, place] for place, name in enumerate(names)}


def _as(counts: Counts, kind: type[np.unsignedinteger[Any]], row: int) -> Counts:
    """One row's counts in the record's type; what does not fit is refused."""
    if not np.issubdtype(counts.dtype, np.integer):
        raise InputError(
            f"counts are {counts.dtype}", f"row {row}", "store whole numbers, without scaling"
        )
    lowest, highest = int(counts.min()), int(counts.max())
    if lowest < 0 or highest > np.iinfo(kind).max:
        raise InputError(
            f"a count of {lowest if lowest < 0 else highest} does not fit",
            f"row {row}",
            "check the type of the file and full_scale_count",
        )
    return np.ascontiguousarray(counts, kind)
