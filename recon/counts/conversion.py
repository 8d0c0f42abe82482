"""Counts to samples in tesla, in one pass over the counts and bounded memory.

Every row becomes samples in normalised units by one linear map (`Demodulator`) and is put on a
scratch file; what the pass learns of the channels (response from the tone, or from contrast and
sensing time; noise; state) then turns them into tesla while the record is written.
"""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from recon.counts.acquisition import Acquisition
from recon.counts.channel_state import ChannelState, judge
from recon.counts.findings import Finding, inspect_rows
from recon.counts.inspection import Inspection, inspect
from recon.counts.record import CountsRecord
from recon.counts.reference import Reference
from recon.counts.stream import RowTable, Scratch, stream
from recon.errors import InputError
from recon.physics.photons import phase_per_field
from recon.protocol import Protocol
from recon.record import Record, RecordWriter
from recon.solvers.estimate import Progress, silent

FloatArray = NDArray[np.floating]
ComplexArray = NDArray[np.complexfloating]

TONE_SEEN = 5.0
"""Standard errors by which the tone must stand out."""

UNEVEN = 0.1
"""Spread of the channels' weights above which a record carries them."""


@dataclass(frozen=True)
class Settings:
    """How to convert.

    Attributes
    ----------
    reference
        How to read the reference; by default the way that leaves least noise.
    tone
        Take the response and each row's phase from the tone, where the acquisition has one. It is
        taken out of the samples in any case.
    mains
        Look for pickup from the mains and remove it.
    common_noise
        Project out noise that all channels share, in shots without a sensor gradient.
    """

    reference: Reference | None = None
    tone: bool = True
    mains: bool = True
    common_noise: bool = True


@dataclass(frozen=True, eq=False)
class Conversion:
    """Samples and what was learnt on the way.

    Attributes
    ----------
    record
        Samples in tesla of every measured shot; its sample times are the windows' centres.
    acquisition
        How the counts were taken.
    shots
        Which shots of the counts' protocol it holds.
    channels
        Response, noise and state of every channel.
    rows
        One entry per row: light, phase and amplitude of the tone, pickup.
    inspection
        What the first look found.
    findings
        Oddities, each with what was done about it.
    """

    record: Record
    acquisition: Acquisition
    shots: NDArray[np.intp]
    channels: ChannelState
    rows: RowTable
    inspection: Inspection
    findings: tuple[Finding, ...] = field(default=())


def convert(
    counts: CountsRecord,
    path: Path | str | None = None,
    settings: Settings | None = None,
    *,
    progress: Progress = silent,
) -> Conversion:
    """Convert a record of counts; the samples go to a file, or stay in memory.

    Raises
    ------
    InputError
        No row is whole, the reference is zero, the tone is not there, no channel is usable, a line
        cannot be told from the samples, or the record cannot be written.
    """
    settings = settings or Settings()
    progress("looking at a few shots", None)
    use, findings = inspect_rows(counts)
    tone = settings.tone and counts.acquisition.tone is not None
    look = inspect(counts, use, settings.reference, tone=tone, mains=settings.mains)
    with tempfile.TemporaryDirectory(
        prefix=".partial-", dir=None if path is None else _folder(path)
    ) as folder:
        scratch = Scratch.create(counts, Path(folder))
        table, light, saturated, phasor = stream(counts, use, look, scratch, tone, progress)
        channels = _channels(counts, look, light, saturated, phasor if tone else None, len(use))
        shots = np.flatnonzero(scratch.measured)
        protocol = _measured_protocol(counts, shots, scratch.measured[shots])
        pattern = _pattern(look, channels) if settings.common_noise else None
        blocks = _in_tesla(scratch, shots, channels, pattern, protocol, counts, progress)
        record = _written(path, counts, protocol, channels, blocks)
    return Conversion(record, counts.acquisition, shots, channels, table, look, tuple(findings))


def _folder(path: Path | str) -> Path:
    folder = Path(path).parent
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"cannot write ({error.strerror})", str(folder)) from error
    return folder


def _channels(
    counts: CountsRecord,
    look: Inspection,
    light: FloatArray,
    saturated: NDArray[np.bool_],
    phasor: ComplexArray | None,
    rows: int,
) -> ChannelState:
    """Response and state of the channels; the tone's phasor is its mean over the rows."""
    readout = counts.instrument.readout
    slope = phase_per_field(readout.sensing_time, readout.efficiency)
    expected = look.contrast / 2 * slope
    error = np.full(len(light), np.nan)
    response = expected.astype(complex)
    if phasor is not None:
        tone = counts.acquisition.tone
        assert tone is not None
        spread = look.noise * np.sqrt(look.demodulator.line_variance[:2].mean() / rows)
        _check_tone(counts, phasor, spread, light)
        response, error = phasor / tone.amplitude, spread / tone.amplitude
    state = judge(response, light, look.contrast, look.noise, saturated)
    size = np.maximum(np.abs(response), 1e-300)
    noise = look.noise * np.sqrt(look.demodulator.noise_factor) / size
    noise = np.where(state == 0, noise, np.inf)
    shape = counts.row_shape[1:]
    maps = (response, error, noise, look.contrast, light, state)
    return ChannelState(*(one.reshape(shape) for one in maps))


def _check_tone(
    counts: CountsRecord, phasor: ComplexArray, spread: FloatArray, light: FloatArray
) -> None:
    """Refuse a tone that does not stand out of the noise of all lit channels together."""
    lit = (light > 0) & (spread > 0)
    weight = 1 / spread[lit] ** 2
    mean = (weight * phasor[lit]).sum() / weight.sum()
    error = 1 / np.sqrt(weight.sum())
    if abs(mean) < TONE_SEEN * error:
        tone = counts.acquisition.tone
        assert tone is not None
        raise InputError(
            f"the calibration tone of {tone.amplitude_nT:g} nT at {tone.offset_Hz:+g} Hz is not "
            f"there: its line is {abs(mean):.2g} ± {error:.2g} of the light",
            str(counts.path),
            "switch it on, state its true offset, or convert without it",
        )


def _measured_protocol(
    counts: CountsRecord, shots: NDArray[np.intp], measured: NDArray[np.int64]
) -> Protocol:
    """The table of the shots that were measured, sampled at the windows' centres."""
    acquisition, protocol = counts.acquisition, counts.protocol.subset(shots)
    clock = np.full(len(counts.protocol), np.nan)
    clock[counts.shot[::-1]] = counts.clock_time[::-1]
    times = clock[shots] if np.isfinite(clock[shots]).all() else protocol.clock_time
    return replace(
        protocol,
        averages=measured,
        clock_time=times,
        sample_times=protocol.sample_times + acquisition.window_centre,
        sample_duration=acquisition.window,
    )


def _pattern(look: Inspection, channels: ChannelState) -> FloatArray | None:
    """The shared noise in samples, (channels,), zero where a channel is not used."""
    if not look.common.uniform:
        return None
    size = np.abs(channels.response).ravel()
    good = channels.good.ravel()
    pattern = np.zeros(good.shape)
    pattern[good] = look.common.patterns[0][good] * look.noise[good] / size[good]
    return pattern


def _in_tesla(
    scratch: Scratch,
    shots: NDArray[np.intp],
    channels: ChannelState,
    pattern: FloatArray | None,
    protocol: Protocol,
    counts: CountsRecord,
    progress: Progress,
) -> Iterator[NDArray[np.complex64]]:
    """Samples (1, times, channels y, channels x) of one shot after the other."""
    good = channels.good.ravel()
    scale = np.zeros(good.shape, np.complex64)
    scale[good] = 1 / channels.response.ravel()[good]
    carrier = counts.acquisition.carrier(counts.instrument)
    turns = np.exp(2j * np.pi * (carrier * protocol.evolution_time % 1)).astype(np.complex64)
    remove = _projection(pattern, channels)
    for place, shot in enumerate(shots):
        block = scratch.sums[shot] * (scale * (turns[place] / scratch.measured[shot]))
        if remove is not None and not protocol.sensor_wavevector[place].any():
            block -= (block @ remove[1])[:, None] * remove[0]
        progress("writing samples", (place + 1) / len(shots))
        yield block.reshape(1, len(block), *channels.good.shape)


def _projection(
    pattern: FloatArray | None, channels: ChannelState
) -> tuple[NDArray[np.float32], NDArray[np.float32]] | None:
    """u and W u/(uᵀ W u): taking off u times the second's product leaves nothing along u."""
    if pattern is None:
        return None
    weighed = pattern * channels.weight.ravel()
    other = weighed / (pattern @ weighed)
    size = np.sqrt((pattern**2).mean())
    return (pattern / size).astype(np.float32), (other * size).astype(np.float32)


def _written(
    path: Path | str | None,
    counts: CountsRecord,
    protocol: Protocol,
    channels: ChannelState,
    blocks: Iterator[NDArray[np.complex64]],
) -> Record:
    weight = _carried(channels.weight)
    if path is None:
        samples = np.concatenate(list(blocks))
        return Record.from_arrays(
            counts.instrument,
            protocol,
            samples,
            counts.description_json,
            noise_sd=channels.noise_sd,
            channel_weight=weight,
        )
    writer = RecordWriter(
        path,
        counts.instrument,
        protocol,
        counts.description_json,
        channels.noise_sd,
        channel_weight=weight,
    )
    with writer:
        for block in blocks:
            writer.append(block)
    return Record.open(path)


def _carried(weight: NDArray[np.float32]) -> NDArray[np.float32] | None:
    """The weights, or None where they are so even that blocks may be kept."""
    even = weight.min() > 0 and float(weight.std() / weight.mean()) < UNEVEN
    return None if even else weight
