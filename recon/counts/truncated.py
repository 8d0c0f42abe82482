"""HDF5 files whose end is missing: what is there is read, the rest is zeros.

A copy that broke off cannot be opened as it is. Padded with zeros to its stated size it can, as
long as its directory survives; a row counts if all of its bytes lie before the break.
"""

from __future__ import annotations

import io
from pathlib import Path

import h5py

from recon.errors import InputError


class _Padded(io.RawIOBase):
    """A file that reads as zeros beyond its end, up to any size asked for."""

    def __init__(self, path: Path, size: int) -> None:
        super().__init__()
        self._raw, self._size, self._place = path.open("rb", buffering=0), size, 0

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        start = {io.SEEK_SET: 0, io.SEEK_CUR: self._place, io.SEEK_END: self._size}[whence]
        self._place = start + offset
        return self._place

    def tell(self) -> int:
        return self._place

    def readinto(self, buffer: memoryview) -> int:  # type: ignore[override]
        view = memoryview(buffer).cast("B")
        self._raw.seek(self._place)
        got = self._raw.readinto(view) or 0
        view[got:] = bytes(len(view) - got)
        self._place += len(view)
        return len(view)

    def close(self) -> None:
        self._raw.close()
        super().close()


def open_padded(path: Path, stated: int) -> tuple[h5py.File, str]:
    """Open a file that should be `stated` bytes long and ends before; also says by how much.

    Raises
    ------
    InputError
        Too much is missing.
    """
    missing = stated - path.stat().st_size
    try:
        return h5py.File(_Padded(path, stated), "r"), f"the file ends {missing} bytes early"
    except (OSError, RuntimeError, ValueError, KeyError) as error:
        raise InputError(
            "is truncated, and so much is missing that nothing can be read",
            str(path),
            "copy the file again",
        ) from error


def superblock(path: Path) -> tuple[int, bool] | None:
    """End-of-file address, and whether a writer has (or had) the file open; None if not HDF5.

    Superblock of version 2 or 3, as the writer makes it (HDF5 file format specification, II.A); of
    any other version nothing is known, and the file is taken as whole.
    """
    with path.open("rb") as raw:
        head = raw.read(48)
    if len(head) < 48 or head[:8] != b"\x89HDF\r\n\x1a\n":
        return None
    if head[8] not in (2, 3) or head[9] != 8:
        return 0, False
    return int.from_bytes(head[28:36], "little"), bool(head[11])


def rows_present(file: h5py.File, rows: int, path: Path) -> int:
    """Number of leading rows whose chunks lie before the file's end."""
    end = path.stat().st_size
    for row in range(rows):
        for name in ("signal", "reference"):
            try:
                chunk = file[name].id.get_chunk_info_by_coord((row, 0, 0, 0))
            except (OSError, RuntimeError, ValueError):
                return row
            if chunk.byte_offset is None or chunk.byte_offset + chunk.size > end:
                return row
    return rows
