"""What is odd about the rows of a record of counts: order, repeats, gaps, clocks, empty frames."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.counts.record import CountsRecord
from recon.errors import InputError

CLOCK_STEPS = 3.0
"""Intervals between rows beyond which the clock is said to have jumped, in usual intervals."""


@dataclass(frozen=True)
class Finding:
    """One oddity: what was found, where, and what was done about it."""

    what: str
    where: str
    done: str

    def __str__(self) -> str:
        return f"{self.where}: {self.what}; {self.done}"


def inspect_rows(record: CountsRecord) -> tuple[NDArray[np.int64], list[Finding]]:
    """Which rows to use, and what is odd about them.

    Raises
    ------
    InputError
        There is no whole row, or a row belongs to no shot of the protocol.
    """
    where = str(record.path)
    if len(record) == 0:
        raise InputError("has no whole shot", where, "measure at least one")
    beyond = np.flatnonzero((record.shot < 0) | (record.shot >= len(record.protocol)))
    if beyond.size:
        raise InputError(
            f"row {beyond[0]} measures shot {record.shot[beyond[0]]}, the protocol has "
            f"{len(record.protocol)}",
            where,
            "put the right protocol beside the counts",
        )
    found = [Finding(record.cut, where, "the rest is read")] if record.cut else []
    found += _order(record, where) + _clock(record, where)
    use, repeats = _repeats(record, where)
    found += repeats + _missing(record, use, where)
    return use, found


def _order(record: CountsRecord, where: str) -> list[Finding]:
    falls = np.flatnonzero(np.diff(record.shot) < 0)
    if not falls.size:
        return []
    what = f"{falls.size} rows come before a shot that precedes them in the table, first row"
    return [Finding(f"{what} {falls[0] + 1}", where, "each is put where its shot number says")]


def _clock(record: CountsRecord, where: str) -> list[Finding]:
    clock = record.clock_time
    wrong = np.flatnonzero(~np.isfinite(clock))
    if wrong.size:
        return [
            Finding(
                f"the clock of row {wrong[0]} is not a number",
                where,
                "the protocol's times are used throughout",
            )
        ]
    steps = np.diff(clock)
    if steps.size < 2:
        return []
    found = []
    back = np.flatnonzero(steps <= 0)
    if back.size:
        found.append(
            Finding(
                f"the clock runs back by {-steps[back[0]]:.3g} s at row {back[0] + 1}"
                + (f" and at {back.size - 1} more" if back.size > 1 else ""),
                where,
                "clock times are used as they stand",
            )
        )
    usual = float(np.median(steps))
    jumps = np.flatnonzero(steps > CLOCK_STEPS * usual) if usual > 0 else back
    if jumps.size and usual > 0:
        found.append(
            Finding(
                f"the clock jumps by {steps[jumps[0]]:.3g} s at row {jumps[0] + 1}, where "
                f"{usual:.3g} s is usual"
                + (f", and at {jumps.size - 1} more" if jumps.size > 1 else ""),
                where,
                "drift is not followed across the jump",
            )
        )
    return found


def _repeats(record: CountsRecord, where: str) -> tuple[NDArray[np.int64], list[Finding]]:
    """Rows to use: a copy of an earlier row is left out, a new measurement of it is averaged in."""
    measured = np.bincount(record.shot, minlength=len(record.protocol))
    over = np.flatnonzero(measured > record.protocol.averages)
    use = np.ones(len(record), bool)
    found = []
    if over.size:
        copies = _copies(record, over)
        use[copies] = False
        if copies:
            found.append(
                Finding(
                    f"{len(copies)} rows are copies of earlier ones, first row {copies[0]}",
                    where,
                    "the copies are left out",
                )
            )
        measured = np.bincount(record.shot[use], minlength=len(record.protocol))
        more = np.flatnonzero(measured > record.protocol.averages)
        if more.size:
            found.append(
                Finding(
                    f"{more.size} shots were measured more often than planned, first shot "
                    f"{more[0]} ({measured[more[0]]} times)",
                    where,
                    "all measurements are averaged",
                )
            )
    return np.flatnonzero(use), found


def _copies(record: CountsRecord, shots: NDArray[np.intp]) -> list[int]:
    """Rows of these shots whose counts equal those of an earlier row."""
    wanted = np.isin(record.shot, shots)
    seen: set[tuple[int, bytes]] = set()
    copies = []
    for where, signal, _ in record.rows(1):
        row = where.start
        if wanted[row]:
            key = (int(record.shot[row]), hashlib.sha256(signal.tobytes()).digest())
            if key in seen:
                copies.append(row)
            seen.add(key)
    return copies


def _missing(record: CountsRecord, use: NDArray[np.int64], where: str) -> list[Finding]:
    measured = np.bincount(record.shot[use], minlength=len(record.protocol))
    absent = np.flatnonzero(measured == 0)
    fewer = np.flatnonzero((measured > 0) & (measured < record.protocol.averages))
    found = []
    if absent.size:
        found.append(
            Finding(
                f"{absent.size} of {len(measured)} shots were not measured: {_listed(absent)}",
                where,
                "the samples hold the others",
            )
        )
    if fewer.size:
        found.append(
            Finding(
                f"{fewer.size} shots have fewer averages than planned: {_listed(fewer)}",
                where,
                "their weight is smaller",
            )
        )
    return found


def _listed(numbers: Sequence[int] | NDArray[np.intp], most: int = 8) -> str:
    text = ", ".join(str(int(one)) for one in numbers[:most])
    return text + (", …" if len(numbers) > most else "")
