"""The calibration report: verdicts as text and JSON, tables per shot and channel, figures."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon import figures
from recon.calibrate.account import conversion_verdicts, geometry_verdicts, record_verdicts
from recon.calibrate.calibration import Calibrated
from recon.counts.conversion import Conversion
from recon.figures.channel_maps import channel_maps
from recon.figures.shot_course import Course, shot_course
from recon.figures.verdicts import Verdict, verdicts
from recon.files import atomic_path

CAUTION = "Research use only; not for diagnosis."


def all_verdicts(conversion: Conversion | None, calibrated: Calibrated) -> list[Verdict]:
    """One verdict per quantity, in the order in which they were found."""
    first = [] if conversion is None else list(conversion_verdicts(conversion))
    found = [*first, *record_verdicts(calibrated)]
    if calibrated.geometry is not None:
        found += geometry_verdicts(calibrated.nominal, calibrated.geometry)
    return found


def write_report(
    folder: Path | str, conversion: Conversion | None, calibrated: Calibrated
) -> list[Path]:
    """Write `calibration.json`, `verdicts.txt` and the figures; the paths written."""
    folder = Path(folder)
    found = all_verdicts(conversion, calibrated)
    findings = [] if conversion is None else [str(one) for one in conversion.findings]
    written = [
        _text(folder / "verdicts.txt", [*map(str, found), *findings, CAUTION]),
        _json(folder / "calibration.json", _facts(found, findings, conversion, calibrated)),
    ]
    pictures = {"verdicts.png": verdicts(found)}
    courses = _courses(calibrated)
    if courses:
        pictures["shots.png"] = shot_course(calibrated.record.protocol.clock_time, courses)
    if conversion is not None and conversion.channels.good.size > 1:
        pictures["channels.png"] = _channel_picture(conversion)
    for name, picture in pictures.items():
        written.append(figures.save(picture, folder / name))
    return written


def _courses(calibrated: Calibrated) -> list[Course]:
    courses = []
    drift, factors = calibrated.drift, calibrated.factors
    if drift is not None:
        courses.append(
            Course(
                "nuclear frequency",
                "Hz",
                drift.raw_Hz,
                drift.raw_error_Hz,
                calibrated.frequency_Hz,
            )
        )
    if factors is not None:
        courses.append(
            Course("phase", "rad", factors.phase_rad, factors.error(1), calibrated.phase_rad)
        )
        applied = None
        if calibrated.decay is not None:
            clock = calibrated.record.protocol.clock_time
            applied = -calibrated.decay.rate.value * (clock - clock.mean())
        courses.append(
            Course("ln amplitude", "1", factors.log_amplitude, factors.error(0), applied)
        )
    return courses


def _channel_picture(conversion: Conversion) -> Any:
    channels = conversion.channels
    y, x = conversion.record.view
    size = np.abs(channels.response)
    typical = float(np.median(size[channels.good]))
    maps = {
        "light (counts)": channels.light,
        "response (of the median)": size / typical,
        "phase (rad)": np.angle(channels.response),
        "noise (nT)": np.where(channels.good, channels.noise, 0) * 1e9,
    }
    return channel_maps(maps, channels.good, (y * 1e6, x * 1e6))


def _facts(
    found: Sequence[Verdict],
    findings: Sequence[str],
    conversion: Conversion | None,
    calibrated: Calibrated,
) -> dict[str, Any]:
    record = calibrated.record
    facts: dict[str, Any] = {
        "caution": CAUTION,
        "quantities": [
            {
                "name": one.name,
                "unit": one.unit,
                "estimate": one.estimate,
                "standard_error": one.standard_error,
                "expected": one.expected,
                "allowance": one.allowance,
                "within": one.within,
                "verdict": str(one),
            }
            for one in found
        ],
        "findings": list(findings),
        "noise_sd_T": record.noise_sd,
        "protocol_sha256": record.protocol.digest(),
        "shots": {
            "clock_time_s": _listed(record.protocol.clock_time),
            "frequency_Hz": _listed(calibrated.frequency_Hz),
            "phase_rad": _listed(calibrated.phase_rad),
        },
    }
    if calibrated.geometry is not None:
        facts["geometry"] = [
            {"name": one.name, "unit": one.unit, "value": one.value, "fixed": one.fixed}
            | ({"standard_error": one.standard_error} if one.known else {})
            for one in (*calibrated.geometry.estimates, *calibrated.geometry.derived)
        ]
        facts["undetermined"] = list(calibrated.geometry.lines)
    if conversion is not None:
        rows = conversion.rows
        facts["carrier"] = _carrier(conversion)
        facts["rows"] = {
            "row": rows.row.tolist(),
            "shot": rows.shot.tolist(),
            "light": _listed(rows.light),
            "tone_phase_rad": _listed(np.angle(rows.tone)),
        }
        facts["channels"] = str(conversion.channels)
    return facts


def _carrier(conversion: Conversion) -> dict[str, Any]:
    """The fold by name."""
    acquisition, instrument = conversion.acquisition, conversion.record.instrument
    alias = acquisition.alias(instrument)
    return {
        "frequency_Hz": acquisition.carrier(instrument),
        "frame_rate_Hz": 1 / acquisition.frame_interval,
        "alias_Hz": alias.frequency,
        "zone": alias.zone,
        "reversed": alias.reversed,
    }


def _listed(values: NDArray[np.floating]) -> list[float]:
    return [float(f"{value:.8g}") for value in values]


def _text(path: Path, lines: Sequence[str]) -> Path:
    with atomic_path(path) as temporary:
        temporary.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def _json(path: Path, facts: dict[str, Any]) -> Path:
    with atomic_path(path) as temporary:
        temporary.write_text(json.dumps(facts, indent=1, allow_nan=False) + "\n", encoding="utf-8")
    return path
