"""The one pass over the counts: rows in, samples in normalised units out, statistics on the way.

Reading (and decompressing) goes on in a thread of its own while rows are worked on.
"""

from __future__ import annotations

import queue
import threading
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from recon.counts.inspection import Inspection
from recon.counts.record import Counts, CountsRecord
from recon.errors import InputError
from recon.solvers.estimate import Progress

FloatArray = NDArray[np.floating]
ComplexArray = NDArray[np.complexfloating]
Item = TypeVar("Item")
IN_MEMORY = 2**26
CACHED = 2**17
"""Frames times channels that are worked on at once, so that they stay in the processor's cache."""


@dataclass(frozen=True, eq=False)
class RowTable:
    """One entry per row that was used.

    Attributes
    ----------
    row, shot
        Number in the file, and of the protocol's shot.
    clock_time
        Seconds.
    light
        Mean reference count above its offset.
    tone
        Complex amplitude of the tone, mean over channels, in normalised units, before its phase
        was taken off.
    pickup
        Complex amplitudes of the mains lines, mean over channels, (rows, lines).
    """

    row: NDArray[np.int64]
    shot: NDArray[np.int64]
    clock_time: FloatArray
    light: FloatArray
    tone: ComplexArray
    pickup: ComplexArray


@dataclass(eq=False)
class Scratch:
    """Sums of each shot's samples over its rows, complex64 (shots, windows, channels)."""

    sums: NDArray[np.complex64]
    measured: NDArray[np.int64]

    @classmethod
    def create(cls, counts: CountsRecord, folder: Path) -> Scratch:
        """In memory where small, else in a file of `folder` that the caller removes."""
        shots, windows = len(counts.protocol), len(counts.protocol.sample_times)
        shape = (shots, windows, int(np.prod(counts.row_shape[1:])))
        measured = np.zeros(shots, np.int64)
        if 8 * int(np.prod(shape)) <= IN_MEMORY:
            return cls(np.zeros(shape, np.complex64), measured)
        try:
            held = np.memmap(folder / "samples", np.complex64, "w+", shape=shape)
        except OSError as error:
            raise InputError(f"cannot write ({error.strerror})", str(folder)) from error
        return cls(held, measured)

    def add(self, shot: int, samples: ComplexArray) -> None:
        """Add one row of a shot."""
        if self.measured[shot]:
            self.sums[shot] += samples
        else:
            self.sums[shot] = samples
        self.measured[shot] += 1


def stream(
    counts: CountsRecord,
    use: NDArray[np.int64],
    look: Inspection,
    scratch: Scratch,
    tone: bool,
    progress: Progress,
) -> tuple[RowTable, FloatArray, NDArray[np.bool_], ComplexArray]:
    """Fill the scratch; also light, saturation and mean tone phasor of every channel.

    With a tone, rows are turned by its phase: each by its own where their starts jitter, all by the
    same where they do not.
    """
    channels = int(np.prod(counts.row_shape[1:]))
    light: FloatArray = np.zeros(channels)
    phasor: ComplexArray = np.zeros(channels, complex)
    saturated: NDArray[np.bool_] = np.zeros(channels, bool)
    rows: list[tuple[Any, ...]] = []
    used, tones = set(use.tolist()), int(counts.acquisition.tone is not None)
    for where, signals, references in prefetched(counts.rows()):
        for row in range(where.start, where.stop):
            if row not in used:
                continue
            signal, reference = signals[row - where.start], references[row - where.start]
            samples, lines, level, full = _row(counts, look, signal, reference, row)
            mean = complex(lines[0] @ look.tone_weight) if tone else 1.0
            if tone:
                turn = look.turn(mean)
                samples *= np.complex64(turn)
                phasor += lines[0] * turn
            light += level
            saturated |= full
            scratch.add(int(counts.shot[row]), samples)
            pickup = lines[tones:].mean(axis=1)
            rows.append((row, counts.shot[row], counts.clock_time[row], level.mean(), mean, pickup))
            progress("converting counts", (row + 1) / len(counts))
    columns = [np.array(column) for column in zip(*rows, strict=True)]
    number = len(rows)
    return RowTable(*columns), light / number, saturated, phasor / number


def _row(
    counts: CountsRecord, look: Inspection, signal: Counts, reference: Counts, row: int
) -> tuple[ComplexArray, ComplexArray, FloatArray, NDArray[np.bool_]]:
    """Samples, line amplitudes, reference level and saturation of one row's channels."""
    acquisition = counts.acquisition
    offset = np.float32(acquisition.count_offset)
    signal, reference = (one.reshape(len(one), -1) for one in (signal, reference))
    per_window, channels = acquisition.frames_per_window, signal.shape[1]
    windows = len(signal) // per_window
    together = max(1, CACHED // (per_window * channels))
    frames = np.empty((min(together, windows) * per_window, channels), np.float32)
    light, level = np.empty_like(frames), np.zeros(channels, np.float32)
    share = np.full(len(frames), 1 / len(signal), np.float32)
    sums = look.demodulator.begin(channels)
    for start in range(0, windows, together):
        part = slice(start, min(start + together, windows))
        those = slice(part.start * per_window, part.stop * per_window)
        count = those.stop - those.start
        np.subtract(signal[those], offset, out=frames[:count], dtype=np.float32)
        np.subtract(reference[those], offset, out=light[:count], dtype=np.float32)
        level += share[:count] @ light[:count]
        look.reference.divide(frames[:count], light[:count], part.stop - part.start)
        look.demodulator.add(part, frames[:count], sums)
    if not (level > 0).any():
        raise InputError(
            f"the reference of row {row} (shot {counts.shot[row]}) is zero throughout",
            str(counts.path),
            "check the reference readout, or leave the shot out",
        )
    samples, lines = look.demodulator.finish(sums)
    divisor = look.reference.left(level)
    samples /= divisor
    lines /= divisor
    full = signal.max(axis=0) >= acquisition.full_scale_count
    return samples, lines, np.asarray(level, np.float64), full


def prefetched(items: Iterable[Item], ahead: int = 1) -> Iterator[Item]:
    """The items, each fetched in another thread while the one before is worked on."""
    waiting: queue.Queue[Any] = queue.Queue(ahead)
    stop = threading.Event()

    def fetch() -> None:
        try:
            for item in items:
                while not stop.is_set():
                    try:
                        waiting.put((item, None), timeout=0.2)
                        break
                    except queue.Full:
                        continue
                if stop.is_set():
                    return
            waiting.put((None, None))
        except BaseException as error:  # handed to the consumer
            waiting.put((None, error))

    thread = threading.Thread(target=fetch, daemon=True)
    thread.start()
    try:
        while True:
            item, error = waiting.get()
            if error is not None:
                raise error
            if item is None:
                return
            yield item
    finally:
        stop.set()
        while not waiting.empty():
            waiting.get_nowait()
        thread.join()
