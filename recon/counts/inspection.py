"""A first look at a few rows: how to read the reference, pickup lines, noise of every channel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.counts.common_noise import CommonNoise, common_noise
from recon.counts.demodulation import Demodulator, Line
from recon.counts.pickup import Pickup, find_pickup
from recon.counts.record import Counts, CountsRecord
from recon.counts.reference import EveryFrame, LaserTimesChannel, Reference, WindowMean
from recon.errors import InputError

Frames = NDArray[np.float32]
FloatArray = NDArray[np.floating]
LOOKED_AT = 8
JITTERS = 4.0
"""Standard deviations of chi-squared beyond which the tone's phases are said to jitter."""

FEWEST, PLENTY = 4, 2**23
"""Rows looked at in any case, and frames times channels that are enough."""


@dataclass(frozen=True, eq=False)
class Inspection:
    """What a few rows tell.

    Attributes
    ----------
    reference
        The way to read the reference that leaves least noise.
    demodulator
        With the tone and the pickup lines that were found.
    pickup
        The mains, or None.
    level
        Mean of the normalised frames, (channels,): 1 − C/2.
    noise
        Standard deviation of a normalised frame, (channels,).
    common
        Noise that channels share.
    looked_at
        Number of frames it rests on.
    tone_weight
        Weight of each channel's tone in a row's, summing to 1.
    tone_phase
        Phase of the tone where all rows share it, rad; None where their starts jitter.
    """

    reference: Reference
    demodulator: Demodulator
    pickup: Pickup | None
    level: FloatArray
    noise: FloatArray
    common: CommonNoise
    looked_at: int
    tone_weight: FloatArray
    tone_phase: float | None

    def turn(self, tone: complex) -> complex:
        """The factor that undoes the phase of a row whose mean tone is given."""
        phase = np.angle(tone) if self.tone_phase is None else self.tone_phase
        return complex(np.exp(-1j * phase))

    @property
    def contrast(self) -> FloatArray:
        """C of every channel, (channels,)."""
        return np.asarray(2 * (1 - self.level))


def inspect(
    record: CountsRecord,
    use: NDArray[np.int64],
    reference: Reference | None,
    *,
    tone: bool,
    mains: bool,
) -> Inspection:
    """Look at up to `LOOKED_AT` rows spread over the record."""
    held = _spread_rows(record, use)
    lines = tone_lines(record)
    plain = Demodulator.build(record.acquisition, record.instrument, record.protocol, lines)
    if reference is None:
        reference = _quietest(record, held[:2], plain)
    rows = [normalised(record, signal, light, reference) for signal, light in held]
    pickup = None
    if mains and record.acquisition.mains_Hz:
        traces = np.stack([row.mean(axis=1) for row in rows])
        pickup = find_pickup(record, traces, lines)
    if pickup is not None:
        lines = (*lines, *pickup.lines)
    demodulator = Demodulator.build(record.acquisition, record.instrument, record.protocol, lines)
    residuals = [demodulator.residuals(row) for row in rows]
    power = sum(np.einsum("fc,fc->c", one, one).astype(np.float64) for one in residuals)
    noise = np.sqrt(power / (len(rows) * demodulator.freedom))
    level = np.mean([row.mean(axis=0, dtype=np.float64) for row in rows], axis=0)
    freedom = demodulator.freedom / len(residuals[0])
    common = common_noise(residuals, noise, freedom)
    frames = sum(len(one) for one in residuals)
    weight = _tone_weight(2 * (1 - level), noise)
    phase = _shared_phase(rows, demodulator, weight, noise) if tone else None
    return Inspection(reference, demodulator, pickup, level, noise, common, frames, weight, phase)


def _tone_weight(contrast: FloatArray, noise: FloatArray) -> FloatArray:
    """Contrast over variance, summing to 1."""
    weight = np.where(noise > 0, np.clip(contrast, 0, 1) / np.maximum(noise, 1e-30) ** 2, 0)
    total = weight.sum()
    return np.asarray(weight / total if total > 0 else np.full(len(weight), 1 / len(weight)))


def _shared_phase(
    rows: list[Frames], demodulator: Demodulator, weight: FloatArray, noise: FloatArray
) -> float | None:
    """The tone's phase, if the rows' phases differ by no more than noise explains."""
    tones = np.array([demodulator.apply(row)[1][0] @ weight for row in rows])
    mean = tones.mean()
    if len(rows) < 2 or mean == 0:
        return None
    spread = np.sqrt(demodulator.line_variance[:2].mean() * (weight**2 * noise**2).sum())
    scatter = np.sum(np.angle(tones / mean) ** 2) / (spread / abs(mean)) ** 2
    degrees = len(rows) - 1
    return float(np.angle(mean)) if scatter < degrees + JITTERS * np.sqrt(2 * degrees) else None


def tone_lines(record: CountsRecord) -> tuple[Line, ...]:
    """The calibration tone as a line, if there is one."""
    tone = record.acquisition.tone
    if tone is None:
        return ()
    return (Line("the tone", record.acquisition.carrier(record.instrument) + tone.offset_Hz),)


def normalised(record: CountsRecord, signal: Counts, light: Counts, reference: Reference) -> Frames:
    """One row's frames over the light, (frames, channels)."""
    offset = np.float32(record.acquisition.count_offset)
    frames, lit = without_offset(signal, offset), without_offset(light, offset)
    reference.divide(frames, lit, len(record.protocol.sample_times))
    frames /= reference.left(lit.mean(axis=0))
    return frames


def without_offset(counts: Counts, offset: np.float32) -> Frames:
    """Counts of one row as float32 (frames, channels), the offset taken off."""
    frames = np.empty((len(counts), int(np.prod(counts.shape[1:]))), np.float32)
    np.subtract(counts.reshape(frames.shape), offset, out=frames, dtype=np.float32)
    return frames


def _spread_rows(record: CountsRecord, use: NDArray[np.int64]) -> list[tuple[Counts, Counts]]:
    """Copies of a few rows spread over the record."""
    count = int(np.clip(PLENTY // int(np.prod(record.row_shape)), FEWEST, LOOKED_AT))
    wanted = set(use[np.linspace(0, len(use) - 1, min(count, len(use))).round().astype(int)])
    held = []
    for row in sorted(int(one) for one in wanted):
        signal, light = record.row(row)
        if not light.any():
            raise InputError(
                f"the reference of row {row} (shot {record.shot[row]}) is zero throughout",
                str(record.path),
                "check the reference readout, or leave the shot out",
            )
        held.append((signal, light))
    return held


def _quietest(
    record: CountsRecord, held: list[tuple[Counts, Counts]], demodulator: Demodulator
) -> Reference:
    """The first rule, unless another has a hundredth less median noise power over channels."""
    rules: list[Reference] = [EveryFrame(), WindowMean()]
    if int(np.prod(record.row_shape[1:])) >= 16:
        rules.insert(0, LaserTimesChannel())
    spread = []
    for rule in rules:
        rows = [normalised(record, *one, rule) for one in held]
        squares = [
            (demodulator.residuals(row).astype(np.float64) ** 2).mean(axis=0) for row in rows
        ]
        spread.append(float(np.median(np.mean(squares, axis=0))))
    clearly = [place for place, one in enumerate(spread) if one < 0.99 * spread[0]]
    return rules[min(clearly, key=spread.__getitem__, default=0)]
