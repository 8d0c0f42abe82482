"""What calibration found, held against the description: one verdict per quantity.

Allowances are common practice: how far a quantity may be off before somebody should act.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from recon.calibrate.calibration import Calibrated
from recon.counts.channel_state import State
from recon.counts.conversion import Conversion
from recon.figures.verdicts import Verdict
from recon.physics.photons import phase_per_field

GAIN_PERCENT, CHANNELS_PERCENT, NOISE_PERCENT = 10.0, 5.0, 15.0
PHASE_RAD, JITTER_RAD, COMMON_PERCENT, LIGHT_PERCENT = 0.1, 0.3, 3.0, 10.0
MAINS_HZ, PICKUP_PPM, LOST_PERCENT, OFFSET_HZ = 0.2, 100.0, 10.0, 5.0


def conversion_verdicts(conversion: Conversion) -> Iterator[Verdict]:
    """Channels, response, noise, light, pickup, timing."""
    channels, look, record = conversion.channels, conversion.inspection, conversion.record
    good = channels.good
    count = good.size
    usable = 100 * good.mean()
    yield Verdict("usable channels", "%", usable, 0.0, 100.0, CHANNELS_PERCENT, _bad(conversion))
    readout = record.instrument.readout
    described = readout.contrast / 2 * phase_per_field(readout.sensing_time, readout.efficiency)
    size = np.abs(channels.response[good]) / described
    error = np.nan_to_num(channels.response_error[good]) / described
    yield Verdict(
        "response to a known field",
        "% of the description",
        100 * float(np.median(size)),
        100 * 1.2533 * float(np.sqrt(np.mean(error**2) / good.sum())),
        100.0,
        GAIN_PERCENT,
        "check contrast, sensing time and efficiency in the description",
    )
    if good.sum() > 1:
        yield Verdict(
            "spread of the response over channels",
            "%",
            100 * float(np.sqrt(max(size.var() - np.mean(error**2), 0)) / size.mean()),
            100 * float(np.sqrt(np.mean(error**2) / (2 * good.sum()))),
            0.0,
            GAIN_PERCENT,
            "it is corrected; even out the microwave or the light to gain signal at the rim",
        )
        phase = np.angle(channels.response[good])
        spread = np.nan_to_num(channels.response_error[good]) / np.abs(channels.response[good])
        yield Verdict(
            "spread of the channels' phase",
            "rad",
            float(np.sqrt(max(phase.var() - np.mean(spread**2), 0))),
            float(np.sqrt(np.mean(spread**2) / (2 * good.sum()))),
            0.0,
            PHASE_RAD,
            "it is corrected; look for microwave inhomogeneity",
        )
    contrast = channels.contrast[good]
    yield Verdict(
        "contrast",
        "%",
        100 * float(np.median(contrast)),
        100 * 1.2533 * float(contrast.std() / np.sqrt(count)),
        100 * readout.contrast,
        GAIN_PERCENT / 100 * 100 * readout.contrast,
        "check the count offset and the length of the readout",
    )
    yield Verdict(
        "noise of a sample",
        "% of the description",
        100 * channels.noise_sd / record.instrument.field_noise,
        100 / np.sqrt(2 * look.demodulator.freedom * count),
        100.0,
        NOISE_PERCENT,
        "look for read noise, laser noise or fewer photons than described",
    )
    yield Verdict(
        "noise that channels share",
        "% of its variance",
        100 * look.common.share,
        100 * np.sqrt(2.0) / np.sqrt(count) * look.common.share,
        0.0,
        COMMON_PERCENT,
        "it is projected out where that costs nothing; shield the sensor",
    )
    yield from _over_the_rows(conversion)


def _over_the_rows(conversion: Conversion) -> Iterator[Verdict]:
    rows, look = conversion.rows, conversion.inspection
    light = rows.light / rows.light.mean()
    yield Verdict(
        "change of the light over the record",
        "%",
        100 * float(np.ptp(light)),
        0.0,
        0.0,
        LIGHT_PERCENT,
        "it is divided out; bleaching and laser drift cost photons",
    )
    if look.pickup is not None:
        amplitude = np.sqrt((np.abs(rows.pickup) ** 2).mean(axis=0)).max()
        yield Verdict(
            "frequency of the mains",
            "Hz",
            look.pickup.frequency_Hz,
            look.pickup.standard_error_Hz,
            conversion.record.instrument and _nominal(look.pickup.frequency_Hz),
            MAINS_HZ,
            "state mains_Hz as it is",
        )
        yield Verdict(
            "mains pickup in the light",
            "ppm",
            1e6 * float(amplitude),
            1e6 * float(np.abs(rows.pickup).std() / np.sqrt(len(rows.row))),
            0.0,
            PICKUP_PPM,
            "it is fitted and removed; look for ground loops",
        )
    if np.iscomplexobj(rows.tone) and len(rows.row) > 1:
        phase = np.unwrap(np.angle(rows.tone))
        yield Verdict(
            "jitter of the shots' start",
            "rad of the carrier",
            float(phase.std(ddof=1)),
            float(phase.std(ddof=1) / np.sqrt(2 * (len(phase) - 1))),
            0.0,
            JITTER_RAD,
            "it is corrected by the tone; check the trigger",
        )


def _nominal(frequency: float) -> float:
    return 60.0 if frequency > 55 else 50.0


def _bad(conversion: Conversion) -> str:
    channels = conversion.channels
    bad = [f"{channels.count(s)} {s.name.lower()}" for s in State if s and channels.count(s)]
    return f"{', '.join(bad)}: they are left out; clean or replace the camera" if bad else ""


def record_verdicts(calibrated: Calibrated) -> Iterator[Verdict]:
    """Field offset and drift, phases, polarisation."""
    drift, factors, decay = calibrated.drift, calibrated.factors, calibrated.decay
    if drift is not None:
        weights = 1 / drift.raw_error_Hz**2
        frequency = calibrated.frequency_Hz
        yield Verdict(
            "mean offset of the nuclear frequency",
            "Hz",
            float((weights * drift.raw_Hz).sum() / weights.sum()),
            float(1 / np.sqrt(weights.sum())),
            0.0,
            OFFSET_HZ,
            "it is corrected; correct bias_field_mT",
        )
        yield Verdict(
            "drift of the nuclear frequency",
            "Hz from end to end",
            float(np.ptp(frequency)),
            float(np.sqrt(2 * np.median(drift.error_Hz**2))),
            0.0,
            OFFSET_HZ,
            "it is corrected; stabilise the field or its temperature",
        )
    if factors is not None:
        phase, error = factors.phase_rad, factors.error(1)
        yield Verdict(
            "scatter of the shots' phase",
            "rad",
            float(np.sqrt(max(np.var(phase) - np.mean(error**2), 0))),
            float(np.sqrt(np.mean(error**2) / (2 * len(phase)))),
            0.0,
            PHASE_RAD,
            "it is corrected; use a tone in step with the shots",
        )
    if decay is not None:
        yield Verdict(
            decay.lost.name,
            "%",
            decay.lost.value,
            decay.lost.standard_error,
            0.0,
            LOST_PERCENT,
            "it is carried in the amplitudes; put the shots that matter most first",
        )
