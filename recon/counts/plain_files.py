"""Frames in NumPy arrays and TIFF stacks, row by row, also where the end is missing."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any
from typing import Protocol as Interface

import numpy as np
import tifffile
from numpy.typing import NDArray

from recon.errors import InputError

Counts = NDArray[Any]


class Frames(Interface):
    """Rows of frames."""

    @property
    def rows(self) -> int:
        """Number of whole rows."""
        ...

    @property
    def remarks(self) -> tuple[str, ...]:
        """What was left out, in words."""
        ...

    def row(self, number: int) -> Counts:
        """(frames, channels y, channels x)."""
        ...


def frames_in(path: Path, shape: tuple[int, int, int]) -> Frames:
    """Open a file of frames whose rows have a shape (frames, channels y, channels x).

    Raises
    ------
    InputError
        The file is missing, of another kind, damaged, or its frames have another shape.
    """
    if not path.is_file():
        raise InputError("does not exist", str(path), "check the name in the sidecar")
    if path.suffix.lower() == ".npy":
        return _Array.open(path, shape)
    if path.suffix.lower() in (".tif", ".tiff"):
        return _Stack.open(path, shape)
    raise InputError(f"is of kind '{path.suffix}'", str(path), "give .npy, .tif or a CSV trace")


@dataclass(frozen=True, eq=False)
class _Array:
    counts: Counts
    rows: int
    remarks: tuple[str, ...]

    @classmethod
    def open(cls, path: Path, shape: tuple[int, int, int]) -> _Array:
        """Map the file; what is there of a file that was cut off is used."""
        stated, kind, offset = _header(path)
        if not np.issubdtype(kind, np.integer):
            raise InputError(
                f"holds {kind}; counts are whole numbers", str(path), "store uint16 or uint32"
            )
        size = int(np.prod(shape))
        there = (path.stat().st_size - offset) // kind.itemsize
        total = int(np.prod(stated))
        _check_shape(path, stated, shape)
        rows = min(there, total) // size
        remarks: tuple[str, ...] = ()
        if there < total:
            remarks = (f"{path.name} was cut off: {rows} of {total // size} rows are whole",)
        elif total % size:
            remarks = (f"{path.name}: {total % size} counts after the last whole row are left out",)
        if rows == 0:
            raise InputError("holds no whole row", str(path), f"a row is {shape} (frames, y, x)")
        mapped = np.memmap(path, kind, "r", offset, shape=(rows, *shape))
        return cls(mapped, rows, remarks)

    def row(self, number: int) -> Counts:
        """(frames, channels y, channels x)."""
        return np.asarray(self.counts[number])


def _header(path: Path) -> tuple[tuple[int, ...], np.dtype[Any], int]:
    """Shape, type and offset of the data of a NumPy file (NumPy enhancement proposal 1)."""
    try:
        with path.open("rb") as file:
            version = np.lib.format.read_magic(file)
            read = (
                np.lib.format.read_array_header_1_0
                if version == (1, 0)
                else np.lib.format.read_array_header_2_0
            )
            shape, fortran, kind = read(file)
            if fortran and len(shape) > 1:
                raise InputError("is in Fortran order", str(path), "save it in C order")
            return shape, kind, file.tell()
    except InputError:
        raise
    except (ValueError, OSError, EOFError) as error:
        raise InputError(f"is not a NumPy array ({error})", str(path)) from error


def _check_shape(path: Path, found: tuple[int, ...], shape: tuple[int, int, int]) -> None:
    frames, *channels = shape
    one = tuple(channels) == (1, 1)
    forms: list[tuple[int, ...]] = [(frames, *channels), tuple(channels)]
    forms += [(frames,), ()] if one else []
    if not any(len(found) == len(form) + 1 and found[1:] == form for form in forms):
        raise InputError(
            f"has shape {found}, (rows, {frames}, {channels[0]}, {channels[1]}) is wanted",
            str(path),
            "check frames_per_window, the protocol's sample times and the detector",
        )


@dataclass(frozen=True, eq=False)
class _Stack:
    path: Path
    shape: tuple[int, int, int]
    rows: int
    remarks: tuple[str, ...]

    @classmethod
    def open(cls, path: Path, shape: tuple[int, int, int]) -> _Stack:
        """Count the pages; each is a frame."""
        try:
            with tifffile.TiffFile(path) as file:
                pages, first = len(file.pages), file.pages[0]
                found, kind = tuple(first.shape), first.dtype
        except (tifffile.TiffFileError, OSError, ValueError, IndexError) as error:
            raise InputError(f"is not a TIFF stack ({error})", str(path)) from error
        if found != shape[1:]:
            raise InputError(
                f"has pages of {found}, the detector has {shape[1:]} channels (y, x)", str(path)
            )
        if kind is None or not np.issubdtype(kind, np.integer):
            raise InputError(f"holds {kind}; counts are whole numbers", str(path))
        rows, left = divmod(pages, shape[0])
        if rows == 0:
            raise InputError(f"has {pages} pages, a row has {shape[0]} frames", str(path))
        remark = f"{path.name}: {left} pages of a row that was cut off are left out"
        return cls(path, shape, rows, (remark,) if left else ())

    def row(self, number: int) -> Counts:
        """(frames, channels y, channels x)."""
        first = number * self.shape[0]
        try:
            pages = tifffile.imread(self.path, key=range(first, first + self.shape[0]))
        except (tifffile.TiffFileError, OSError, ValueError, IndexError) as error:
            raise InputError(f"row {number} cannot be read ({error})", str(self.path)) from error
        return np.asarray(pages).reshape(self.shape)
