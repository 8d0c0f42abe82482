"""HDF5 files: written whole or not at all, opened with a clear line when they are not ours.

Every file carries the attributes `nearspin_kind` (what it holds) and `nearspin_format` (a whole
number that grows when the layout changes). Arrays are plain datasets; nothing is pickled.
"""

from __future__ import annotations

import dataclasses
import io
import os
import re
from collections.abc import Iterator
from contextlib import contextmanager
from enum import Enum
from pathlib import Path
from typing import Any, TypeVar, get_type_hints

import h5py
import numpy as np

from recon.errors import InputError
from recon.files import atomic_path

KIND = "nearspin_kind"
FORMAT = "nearspin_format"
FORMAT_VERSION = 1

Stored = TypeVar("Stored")


class _Sink:
    """A file for the HDF5 library to write to, which keeps a disk error to itself.

    The library cannot close a file whose writes fail: it crashes the program later. So the first
    error is kept, further writes are dropped, and `StoreFile.check` raises it.
    """

    def __init__(self, raw: io.FileIO) -> None:
        self.raw = raw
        self.error: OSError | None = None
        self.seek, self.tell = raw.seek, raw.tell
        self.read, self.readinto = raw.read, raw.readinto

    def write(self, data: bytes | memoryview) -> int:
        left = memoryview(data).cast("B")
        size = len(left)
        try:
            while len(left) and self.error is None:
                left = left[self.raw.write(left) :]
        except OSError as error:
            self.error = error
        return size

    def truncate(self, size: int) -> int:
        try:
            if self.error is None:
                self.raw.truncate(size)
        except OSError as error:
            self.error = error
        return size

    def flush(self) -> None:
        """Nothing is held back."""


class StoreFile(h5py.File):  # type: ignore[misc]
    """An HDF5 file being written."""

    def __init__(self, raw: io.FileIO) -> None:
        self._sink = _Sink(raw)
        super().__init__(self._sink, "w")

    def check(self) -> None:
        """Raise the disk's error, if there was one; for writers of long files to stop early."""
        if self._sink.error is not None:
            raise self._sink.error


@contextmanager
def write_store(target: Path | str, kind: str) -> Iterator[StoreFile]:
    """Give a new HDF5 file of this kind; it takes the name `target` only if the block succeeds.

    Raises
    ------
    InputError
        The folder cannot be written or the disk is full; an existing `target` is untouched.
    """
    with atomic_path(target) as temporary, io.FileIO(temporary, "w+") as raw:
        with StoreFile(raw) as file:
            file.attrs[KIND] = kind
            file.attrs[FORMAT] = FORMAT_VERSION
            yield file
        file.check()


@contextmanager
def open_store(path: Path | str, kind: str) -> Iterator[h5py.File]:
    """Open an HDF5 file for reading and check that it holds what is wanted.

    Raises
    ------
    InputError
        The file is missing, truncated, not HDF5, of another kind, or of a later format.
    """
    file = _opened(Path(path))
    try:
        with reading(str(path)):
            _check_kind(file, Path(path), kind)
        yield file
    finally:
        file.close()


def store_kind(path: Path | str) -> str:
    """What an HDF5 file of ours holds, such as "record" or "protocol"."""
    with _opened(Path(path)) as file, reading(str(path)):
        return _kind(file, Path(path))


def save_dataclass(path: Path | str, kind: str, value: Any) -> None:
    """Write a dataclass of arrays, numbers, text, enums and inner dataclasses as one file."""
    with write_store(path, kind) as file:
        write_fields(file, value)


def load_dataclass(path: Path | str, kind: str, cls: type[Stored]) -> Stored:
    """Read back what `save_dataclass` wrote."""
    with open_store(path, kind) as file:
        return read_fields(file, cls, str(path))


def write_fields(group: h5py.Group, value: Any) -> None:
    """Write a dataclass into an HDF5 group: arrays as datasets, the rest as attributes."""
    for field in dataclasses.fields(value):
        item = getattr(value, field.name)
        if item is None:
            continue
        if isinstance(item, np.ndarray):
            group.create_dataset(field.name, data=item, track_times=False)
        elif isinstance(item, str) and not isinstance(item, Enum):
            group.create_dataset(field.name, data=item, dtype=h5py.string_dtype())
        elif dataclasses.is_dataclass(item):
            write_fields(group.create_group(field.name), item)
        else:
            group.attrs[field.name] = item.value if isinstance(item, Enum) else item


def read_fields(group: h5py.Group, cls: type[Stored], where: str) -> Stored:
    """Build a dataclass from a group that `write_fields` filled.

    Raises
    ------
    InputError
        A field is missing or damaged, or the dataclass refuses its values.
    """
    hints = get_type_hints(cls)
    values: dict[str, Any] = {}
    for field in dataclasses.fields(cls):  # type: ignore[arg-type]
        if field.name in group:
            values[field.name] = _read_node(group, field.name, hints[field.name], where)
        elif field.name in group.attrs:
            with _refused(where):
                values[field.name] = _plain(group.attrs[field.name], hints[field.name])
        elif _required(field) and type(None) not in getattr(hints[field.name], "__args__", ()):
            raise InputError(f"field '{field.name}' is missing", where, "write the file again")
        elif _required(field):
            values[field.name] = None
    with _refused(where):
        return cls(**values)


@contextmanager
def _refused(where: str) -> Iterator[None]:
    """Name the file in whatever a dataclass says about its values."""
    try:
        yield
    except (TypeError, ValueError) as error:
        raise InputError(str(error), where) from error


def read_dataset(group: h5py.Group, name: str, where: str) -> h5py.Dataset:
    """A dataset of a group, or one line that says it is missing."""
    node = group.get(name)
    if not isinstance(node, h5py.Dataset):
        raise InputError(f"dataset '{name}' is missing", where, "write the file again")
    return node


def read_text(group: h5py.Group, name: str, where: str) -> str:
    """A text dataset of a group."""
    dataset = read_dataset(group, name, where)
    with reading(where):
        value = dataset[()]
        return value.decode() if isinstance(value, bytes) else str(value)


@contextmanager
def reading(where: str) -> Iterator[None]:
    """Turn what is said about damaged contents into one line that names the file."""
    try:
        yield
    except InputError as error:
        if where in str(error):
            raise
        raise InputError(str(error), where) from error
    except (OSError, RuntimeError, KeyError, TypeError, ValueError) as error:
        raise InputError(f"cannot be read ({_reason(error)})", where) from error


def _opened(path: Path) -> h5py.File:
    if not path.is_file():
        found = "is a folder" if path.is_dir() else "does not exist"
        raise InputError(f"{found}, an HDF5 file is wanted", str(path))
    try:
        return h5py.File(path, "r")
    except OSError as error:
        if "truncated" in str(error):
            raise InputError("is truncated", str(path), "copy or write the file again") from error
        if not h5py.is_hdf5(path):
            raise InputError("is not an HDF5 file, or its start is damaged", str(path)) from error
        raise InputError(f"cannot be read ({_reason(error)})", str(path)) from error


def _check_kind(file: h5py.File, path: Path, kind: str) -> None:
    found = _kind(file, path)
    if found != kind:
        raise InputError(f"holds a {found}, not a {kind}", str(path))
    version = int(file.attrs.get(FORMAT, 0))
    if version > FORMAT_VERSION:
        what = f"has format {version}, this program reads up to {FORMAT_VERSION}"
        raise InputError(what, str(path), "use a newer version of the program")


def _kind(file: h5py.File, path: Path) -> str:
    if KIND not in file.attrs:
        raise InputError(f"is HDF5 without the attribute '{KIND}'", str(path))
    return str(file.attrs[KIND])


def _read_node(group: h5py.Group, name: str, hint: Any, where: str) -> Any:
    node = group[name]
    if isinstance(node, h5py.Group):
        return read_fields(node, _dataclass_in(hint), where)
    if h5py.check_string_dtype(node.dtype) is not None:
        return read_text(group, name, where)
    with reading(where):
        return node[()]


def _plain(value: Any, hint: Any) -> Any:
    if isinstance(hint, type) and issubclass(hint, Enum):
        return hint(value)
    if isinstance(value, np.ndarray):
        return tuple(value.tolist())
    return value.item() if isinstance(value, np.generic) else value


def _dataclass_in(hint: Any) -> Any:
    options = (hint, *getattr(hint, "__args__", ()))
    return next(option for option in options if dataclasses.is_dataclass(option))


def _required(field: dataclasses.Field[Any]) -> bool:
    missing = dataclasses.MISSING
    return field.default is missing and field.default_factory is missing


def _reason(error: Exception) -> str:
    """The system's short reason where the HDF5 library's long complaint quotes one."""
    stated = re.search(r"errno = ([1-9]\d*)", str(error))
    return os.strerror(int(stated[1])) if stated else str(error)
