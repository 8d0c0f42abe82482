"""A record with everything corrected that it tells of itself, and an account of what was found.

Order: each shot's frequency from its own lines; amplitude, phase and what is left of the
frequency from the shots' agreement; decay of the polarisation from the amplitudes. Samples are
turned back by the frequencies, the table of shots carries phases and decay. Corrections of single
shots are shrunk by their own uncertainty, s²/(s² + e²) with s² the variance beyond the errors e, so
that noise is not written into the record.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.consistency import ShotConsistency, ShotFactors, UntoldError, shot_factors
from recon.calibrate.decay import Decay, measure_decay
from recon.calibrate.drift import Drift, LineDrift, measure_drift
from recon.calibrate.fixed import Fixed
from recon.calibrate.geometry import FoundGeometry, Geometry, measure_geometry
from recon.errors import InputError
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.record import Record, RecordWriter
from recon.solvers.estimate import Progress, silent

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Calibration:
    """Which estimators run.

    Attributes
    ----------
    drift
        How each shot's frequency is followed, or None.
    shots
        How the shots are made to agree, or None.
    decay
        Look for a decay of the polarisation; needs `shots`.
    geometry
        What of the geometry is estimated, or None.
    fixed
        What is given and not estimated.
    """

    drift: LineDrift | None = field(default_factory=LineDrift)
    shots: ShotConsistency | None = field(
        default_factory=lambda: ShotConsistency(frequency=True, rounds=2)
    )
    decay: bool = True
    geometry: Geometry | None = field(default_factory=Geometry)
    fixed: Fixed = field(default_factory=Fixed)


@dataclass(frozen=True, eq=False)
class Calibrated:
    """What was found, and the corrected record; `nominal` is the instrument as described.

    `drift`, `factors`, `decay`, `geometry` are None where nothing was estimated; `frequency_Hz` and
    `phase_rad` are the corrections that were applied to each shot; `lines` say what the record does
    not tell.
    """

    record: Record
    nominal: Instrument
    drift: Drift | None
    factors: ShotFactors | None
    decay: Decay | None
    geometry: FoundGeometry | None
    frequency_Hz: FloatArray  # noqa: N815
    phase_rad: FloatArray
    lines: tuple[str, ...] = ()


def calibrate(
    record: Record,
    path: Path | str | None = None,
    settings: Calibration | None = None,
    *,
    progress: Progress = silent,
) -> Calibrated:
    """Estimate and correct; the corrected record goes to a file, or stays in memory.

    Raises
    ------
    InputError
        The record carries no description, cannot be followed, or cannot be written.
    """
    settings = settings or Calibration()
    nominal = record.instrument
    fixed, shots = settings.fixed, len(record)
    drift, frequency = None, np.zeros(shots)
    if fixed.field_offset_Hz is not None:
        frequency += fixed.field_offset_Hz
    elif settings.drift is not None:
        drift = measure_drift(record, settings.drift, progress)
        frequency += shrunk(drift.frequency_Hz, drift.error_Hz, about_mean=True)
    turned = _turned(record, frequency)
    factors, phase = None, np.zeros(shots)
    lines: list[str] = []
    decay = _given_decay(record, fixed)
    if settings.shots is not None and shots >= 3:
        wanted = replace(
            settings.shots, frequency=settings.shots.frequency and fixed.field_offset_Hz is None
        )
        try:
            factors = shot_factors(turned, wanted, progress)
        except UntoldError as error:
            lines.append(str(error))
    if factors is not None:
        phase = shrunk(factors.phase_rad, factors.error(1))
        if fixed.field_offset_Hz is None and settings.shots and settings.shots.frequency:
            frequency += shrunk(factors.frequency_Hz, factors.error(2))
        if decay is None and settings.decay and shots >= 6:
            decay = _if_any(measure_decay(record.protocol, factors))
    protocol = _corrected_protocol(record.protocol, phase, decay)
    geometry = None
    if settings.geometry is not None or fixed.stated:
        straight = replace(_turned(record, frequency), protocol=protocol)
        wanted_geometry = settings.geometry or Geometry((), ())
        geometry = measure_geometry(straight, wanted_geometry, fixed.stated, progress)
        instrument, protocol = geometry.applied(straight)
        record = replace(record, instrument=instrument)
    corrected = _written(record, path, protocol, frequency, progress)
    found = (drift, factors, decay, geometry, frequency, phase)
    return Calibrated(corrected, nominal, *found, lines=tuple(lines))


def shrunk(values: FloatArray, errors: FloatArray, *, about_mean: bool = False) -> FloatArray:
    """Values drawn towards zero (or their weighted mean) as far as their errors explain them."""
    weights = 1 / np.maximum(errors, 1e-12) ** 2
    centre = float((weights * values).sum() / weights.sum()) if about_mean else 0.0
    beyond = values - centre
    variance = max(
        float((weights * beyond**2).sum() / weights.sum() - len(values) / weights.sum()), 0.0
    )
    return np.asarray(centre + beyond * variance / np.maximum(variance + errors**2, 1e-30))


def _given_decay(record: Record, fixed: Fixed) -> Decay | None:
    if fixed.polarisation_lost_percent is None:
        return None
    duration = float(np.ptp(record.protocol.clock_time))
    if duration == 0:
        raise InputError("the clock stands still", "polarisation_lost_percent", "leave it out")
    rate = -np.log1p(-fixed.polarisation_lost_percent / 100) / duration
    return Decay.of_rate(float(rate), 0.0, duration, fixed=True)


def _if_any(decay: Decay) -> Decay:
    """The decay as found; a growth of the polarisation within two errors is taken as none."""
    if decay.rate.value >= 0:
        return decay
    duration = -np.log1p(-decay.lost.value / 100) / decay.rate.value
    return Decay.of_rate(0.0, decay.rate.standard_error, float(duration))


def _corrected_protocol(protocol: Protocol, phase: FloatArray, decay: Decay | None) -> Protocol:
    table = replace(protocol, amplitude=protocol.amplitude * np.exp(1j * phase))
    return table if decay is None else decay.applied(table)


def _turns(record: Record, frequency: FloatArray) -> NDArray[np.complex64]:
    """exp(i 2π ν_j t), (shots, times)."""
    protocol = record.protocol
    times = protocol.sample_times + protocol.evolution_time[:, None]
    return np.exp(2j * np.pi * frequency[:, None] * times).astype(np.complex64)


def _turned_shots(
    record: Record, frequency: FloatArray
) -> Iterator[tuple[slice, NDArray[np.complex64]]]:
    turns = _turns(record, frequency)
    for where, samples in record.shots():
        yield where, samples * turns[where][:, :, None, None]


def _turned(record: Record, frequency: FloatArray) -> Record:
    """The record turned back, in memory."""
    whole = np.empty(record.shape, np.complex64)
    for where, samples in _turned_shots(record, frequency):
        whole[where] = samples
    return replace(record, source=whole)


def _written(
    record: Record,
    path: Path | str | None,
    protocol: Protocol,
    frequency: FloatArray,
    progress: Progress,
) -> Record:
    if path is None:
        return replace(_turned(record, frequency), protocol=protocol)
    writer = RecordWriter(
        path,
        record.instrument,
        protocol,
        record.description_json,
        record.noise_sd,
        channel_weight=record.channel_weight,
    )
    with writer:
        for where, samples in _turned_shots(record, frequency):
            writer.append(samples)
            progress("writing the calibrated record", where.stop / len(record))
    return Record.open(path)
