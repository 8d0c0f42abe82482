"""What calibration found, held against the description: one verdict per quantity.

Allowances are common practice: how far a quantity may be off before somebody should act.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.calibration import Calibrated
from recon.calibrate.consistency import ShotFactors
from recon.calibrate.drift import Drift
from recon.calibrate.geometry import FoundGeometry
from recon.counts.channel_state import State
from recon.counts.conversion import Conversion
from recon.figures.verdicts import Verdict
from recon.instrument import Instrument
from recon.physics.photons import phase_per_field

GAIN_PERCENT, CHANNELS_PERCENT, NOISE_PERCENT = 10.0, 5.0, 15.0
PHASE_RAD, JITTER_RAD, COMMON_PERCENT, LIGHT_PERCENT = 0.1, 0.3, 3.0, 10.0
MAINS_HZ, PICKUP_PPM, LOST_PERCENT, OFFSET_HZ = 0.2, 100.0, 10.0, 5.0
ALLOWED = {"um": 0.3, "deg": 0.5, "us": 20.0}
RATIO = 0.01
MEDIAN = 1.2533
"""Standard error of a median over that of a mean, for normal noise: √(π/2)."""


def conversion_verdicts(conversion: Conversion) -> Iterator[Verdict]:
    """Channels, response, contrast, noise, light, pickup, timing."""
    yield from _channels(conversion)
    yield from _response(conversion)
    yield from _noise(conversion)
    yield from _light(conversion)
    yield from _timing(conversion)


def record_verdicts(calibrated: Calibrated) -> Iterator[Verdict]:
    """Field offset and drift, phases, polarisation."""
    if calibrated.drift is not None:
        yield from _field(calibrated.drift, calibrated.frequency_Hz)
    if calibrated.factors is not None:
        yield _phases(calibrated.factors)
    if calibrated.decay is not None:
        lost = calibrated.decay.lost
        advice = "it is carried in the amplitudes; put the shots that matter most first"
        yield Verdict(lost.name, "%", lost.value, lost.standard_error, 0.0, LOST_PERCENT, advice)


def geometry_verdicts(nominal: Instrument, found: FoundGeometry) -> Iterator[Verdict]:
    """Standoff, layer, bias direction, strengths, rotation and shear of the gradients."""
    layer = nominal.sensor_layer
    expected = {"depth_um": layer.depth_um, "thickness_um": layer.thickness_um}
    matrices = [one for one in found.estimates if "_matrix_" not in one.name]
    for one in (*matrices, *found.derived):
        if one.fixed or not one.known:
            continue
        name = one.name.rsplit("_", 1)[0] if one.unit in ("um", "deg", "us") else one.name
        ratio = "strength" in one.name or "magnification" in one.name or "scale" in one.name
        carried = any(other.name == one.name for other in found.carried) or (
            one.unit != "um" and any("_matrix_" in other.name for other in found.carried)
        )
        yield Verdict(
            _told(name),
            "of the description" if ratio else one.unit.replace("1", "ratio"),
            one.value,
            one.standard_error,
            expected.get(one.name, 1.0 if ratio else 0.0),
            ALLOWED.get(one.unit, RATIO),
            ("it is carried in" if carried else "too small to be carried in")
            + "; correct the description",
        )


def _told(name: str) -> str:
    """A quantity's name in words."""
    words = {"depth": "standoff (depth of the layer)", "thickness": "thickness of the layer"}
    return words.get(name, name.replace("_", " "))


def excess(values: NDArray[np.floating], errors: NDArray[np.floating]) -> tuple[float, float]:
    """Standard deviation of the values beyond their errors, and its standard error."""
    noise = float(np.mean(errors**2))
    size = float(np.sqrt(max(float(np.var(values)) - noise, 0.0)))
    spread = float(np.sqrt((noise + size**2) / (2 * max(values.size, 1))))
    return size, spread


def _channels(conversion: Conversion) -> Iterator[Verdict]:
    channels = conversion.channels
    bad = [f"{channels.count(s)} {s.name.lower()}" for s in State if s and channels.count(s)]
    advice = f"{', '.join(bad)}: they are left out; clean the optics or replace the camera"
    usable = 100 * float(channels.good.mean())
    yield Verdict("usable channels", "%", usable, 0.0, 100.0, CHANNELS_PERCENT, advice)


def _response(conversion: Conversion) -> Iterator[Verdict]:
    channels, readout = conversion.channels, conversion.record.instrument.readout
    good = channels.good
    described = readout.contrast / 2 * phase_per_field(readout.sensing_time, readout.efficiency)
    size = np.abs(channels.response[good]) / described
    error = np.nan_to_num(channels.response_error[good]) / described
    mean_error = float(np.sqrt(np.mean(error**2) / size.size))
    advice = "it is corrected; check contrast, sensing time and efficiency in the description"
    yield Verdict(
        "response to a known field",
        "% of the description",
        100 * float(np.median(size)),
        100 * MEDIAN * float(np.hypot(mean_error, size.std() / np.sqrt(size.size))),
        100.0,
        GAIN_PERCENT,
        advice,
    )
    contrast = 100 * channels.contrast[good]
    yield Verdict(
        "contrast",
        "%",
        float(np.median(contrast)),
        MEDIAN * float(contrast.std() / np.sqrt(contrast.size)),
        100 * readout.contrast,
        GAIN_PERCENT * readout.contrast,
        "check the count offset and the length of the readout",
    )
    if size.size > 1:
        spread, spread_error = excess(size, error)
        advice = "it is corrected; even out microwave and light to gain signal at the rim"
        yield Verdict(
            "spread of the response over channels",
            "%",
            100 * spread / float(size.mean()),
            100 * spread_error,
            0.0,
            GAIN_PERCENT,
            advice,
        )
        phase, phase_error = excess(np.angle(channels.response[good]), error / size)
        advice = "it is corrected; look for microwaves that differ over the view"
        yield Verdict(
            "spread of the channels' phase", "rad", phase, phase_error, 0.0, PHASE_RAD, advice
        )


def _noise(conversion: Conversion) -> Iterator[Verdict]:
    channels, look, record = conversion.channels, conversion.inspection, conversion.record
    count = int(channels.good.sum())
    freedom = look.demodulator.freedom * count
    yield Verdict(
        "noise of a sample",
        "% of the description",
        100 * channels.noise_sd / record.instrument.field_noise,
        100 / float(np.sqrt(2 * freedom)),
        100.0,
        NOISE_PERCENT,
        "look for read noise, laser noise, or fewer photons than described",
    )
    yield Verdict(
        "noise that channels share",
        "% of the variance",
        100 * look.common.share,
        100 * look.common.share * float(np.sqrt(2 / max(look.looked_at, 1))),
        0.0,
        COMMON_PERCENT,
        "it is projected out where that costs nothing; shield the sensor",
    )


def _light(conversion: Conversion) -> Iterator[Verdict]:
    rows, pickup = conversion.rows, conversion.inspection.pickup
    change = 100 * float(np.ptp(rows.light / rows.light.mean()))
    advice = "it is divided out; bleaching and laser drift cost photons"
    name = "change of the light over the record"
    yield Verdict(name, "%", change, 0.0, 0.0, LIGHT_PERCENT, advice)
    if pickup is None:
        return
    yield Verdict(
        "frequency of the mains",
        "Hz",
        pickup.frequency_Hz,
        pickup.standard_error_Hz,
        conversion.acquisition.mains_Hz,
        MAINS_HZ,
        "state mains_Hz as it is",
    )
    name, size, error = _strongest_line(conversion)
    advice = "it is fitted and removed; look for ground loops"
    yield Verdict(f"pickup of {name}", "ppm of the light", size, error, 0.0, PICKUP_PPM, advice)


def _strongest_line(conversion: Conversion) -> tuple[str, float, float]:
    """The multiple of the mains that stands out most: name, r.m.s. amplitude and its error, ppm.

    Amplitudes of noise alone are taken off: |u|² exceeds the true power by the line's variance.
    """
    look, lines = conversion.inspection, conversion.rows.pickup
    alive = look.noise > 0
    mean_noise = np.mean(look.noise[alive] ** 2) * (1 / alive.sum() + look.common.share)
    count = lines.shape[1]
    noise = look.demodulator.line_variance[-2 * count :].reshape(count, 2).sum(axis=1) * mean_noise
    power = (np.abs(lines) ** 2).mean(axis=0)
    size = np.sqrt(np.maximum(power - noise, 0))
    error = np.sqrt(noise / (2 * len(lines)))
    best = int(np.argmax(size / error))
    name = look.demodulator.lines[len(look.demodulator.lines) - count + best].name
    return name, 1e6 * float(size[best]), 1e6 * float(error[best])


def _timing(conversion: Conversion) -> Iterator[Verdict]:
    tone = conversion.rows.tone
    if not np.iscomplexobj(tone) or len(tone) < 2:
        return
    jitter = float(np.unwrap(np.angle(tone)).std(ddof=1))
    error = jitter / float(np.sqrt(2 * (len(tone) - 1)))
    advice = "it is corrected by the tone; check the trigger"
    name = "jitter of the shots' start"
    yield Verdict(name, "rad of the carrier", jitter, error, 0.0, JITTER_RAD, advice)


def _field(drift: Drift, frequency: NDArray[np.floating]) -> Iterator[Verdict]:
    weights = 1 / drift.raw_error_Hz**2
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


def _phases(factors: ShotFactors) -> Verdict:
    scatter, error = excess(factors.phase_rad, factors.error(1))
    advice = "it is corrected; use a tone in step with the shots"
    return Verdict("scatter of the shots' phase", "rad", scatter, error, 0.0, PHASE_RAD, advice)
