"""Writing records of counts: row by row, visible at once, and continued after a crash."""

from __future__ import annotations

from pathlib import Path

import h5py

from recon.files import atomic_path


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
