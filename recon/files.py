"""Writing so that nothing half-written is ever found: temporary name first, then a rename."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from recon.errors import InputError


@contextmanager
def atomic_path(target: Path | str) -> Iterator[Path]:
    """Give a temporary path beside `target`; rename it to `target` if the block succeeds.

    The temporary file keeps the target's ending, so that writers that look at it still work.
    On any failure it is removed and an existing `target` is untouched.

    Raises
    ------
    InputError
        The folder cannot be made or written, or the disk is full.
    """
    target = Path(target)
    ending = "".join(target.suffixes) or ".tmp"
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(prefix=".partial-", suffix=ending, dir=target.parent)
    except OSError as error:
        raise write_failure(target, error) from error
    os.close(handle)
    temporary = Path(name)
    try:
        yield temporary
        temporary.chmod(0o644)
        os.replace(temporary, target)
    except OSError as error:
        raise write_failure(target, error) from error
    finally:
        with suppress(OSError):
            temporary.unlink(missing_ok=True)


def write_failure(target: Path, error: OSError) -> InputError:
    """Turn a failed write into the one line a person reads."""
    reason = error.strerror or str(error)
    return InputError(
        f"cannot write ({reason})", str(target), "choose a folder with room and write access"
    )
