"""`nearspin calibrate`: what a record tells of the apparatus, and the record corrected by it."""

from __future__ import annotations

import tempfile
from dataclasses import replace
from pathlib import Path

import click

from recon.calibrate.calibration import Calibration, calibrate
from recon.calibrate.consistency import ShotConsistency
from recon.calibrate.drift import LineDrift
from recon.calibrate.fixed import Fixed
from recon.calibrate.geometry import Geometry
from recon.calibrate.geometry_parameters import (
    BIAS,
    LATERAL,
    LAYER,
    NUCLEAR_DELAY,
    SENSOR_DELAY,
    SENSOR_MATRIX,
    WAVE,
)
from recon.calibrate.report import all_verdicts, write_report
from recon.cli.common import progress_line
from recon.counts.conversion import convert
from recon.counts.record import CountsRecord, holds_counts
from recon.errors import InputError
from recon.record import Record
from recon.specimen import Specimen


@click.command("calibrate")
@click.argument("measured", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("calibrated.h5"))
@click.option(
    "--report",
    type=click.Path(path_type=Path),
    default=Path("calibration"),
    show_default=True,
    help="Folder for verdicts, tables and figures.",
)
@click.option("--fixed", type=click.Path(path_type=Path), default=None, help="TOML: what is given.")
@click.option(
    "--reference-line",
    multiple=True,
    help="Species whose line follows the field; by default all of them.",
)
@click.option("--without-drift", is_flag=True, help="Do not follow the field.")
@click.option("--without-shots", is_flag=True, help="Do not compare the shots with each other.")
@click.option(
    "--geometry",
    default=None,
    help="What of the geometry is estimated, by commas: depth_um, thickness_um, bias, nuclear, "
    "sensor, delays; or none. By default depth_um,nuclear where a record can tell them.",
)
@click.option(
    "--sample",
    type=click.Path(path_type=Path),
    default=None,
    help="TOML of a specimen with maps, if what was measured is known.",
)
def verb(
    measured: Path,
    output: Path,
    report: Path,
    fixed: Path | None,
    reference_line: tuple[str, ...],
    without_drift: bool,
    without_shots: bool,
    geometry: str | None,
    sample: Path | None,
) -> None:
    """Estimate from MEASURED (counts or a record) what the description only guesses."""
    settings = Calibration(
        drift=None if without_drift else LineDrift(tuple(reference_line)),
        shots=None if without_shots else ShotConsistency(frequency=not without_drift, rounds=2),
        geometry=None if geometry is None else geometry_named(geometry, sample),
        fixed=Fixed() if fixed is None else Fixed.from_toml(fixed),
    )
    with progress_line() as line, tempfile.TemporaryDirectory() as scratch:
        conversion = None
        if holds_counts(measured):
            counts = CountsRecord.open(measured)
            conversion = convert(counts, Path(scratch) / "record.h5", progress=line)
            record = conversion.record
        else:
            record = Record.open(measured)
        if geometry is None and (sample is not None or tells_geometry(record)):
            settings = replace(settings, geometry=geometry_named("depth_um,nuclear", sample))
        calibrated = calibrate(record, output, settings, progress=line)
        line("writing the report", None)
        written = write_report(report, conversion, calibrated)
        found = all_verdicts(conversion, calibrated)
    for one in found:
        click.echo(f"  {one}")
    more = () if calibrated.geometry is None else calibrated.geometry.lines
    for told in (*calibrated.lines, *more):
        click.echo(f"note: {told}")
    for finding in () if conversion is None else conversion.findings:
        click.echo(f"note: {finding}")
    click.echo(f"{output}: calibrated record; report of {len(written)} files in {report}")


def tells_geometry(record: Record) -> bool:
    """A camera and a single evolution time: what estimates without a known sample need."""
    return record.instrument.camera is not None and len(record.protocol.evolutions[0]) == 1


def geometry_named(text: str, sample: Path | None) -> Geometry | None:
    """The quantities behind short names.

    Raises
    ------
    InputError
        There is no such name.
    """
    if text.strip() == "none":
        return None
    groups = {
        "depth_um": LAYER[:1],
        "thickness_um": LAYER[1:],
        "bias": BIAS,
        "nuclear": LATERAL,
        "sensor": SENSOR_MATRIX,
        "delays": NUCLEAR_DELAY + SENSOR_DELAY,
    }
    picked = [one.strip() for one in text.split(",") if one.strip()]
    wrong = [one for one in picked if one not in groups]
    if wrong:
        raise InputError(f"'{wrong[0]}' is none of {', '.join(groups)}", "--geometry")
    names = [quantity.name for one in picked for quantity in groups[one]]
    return Geometry(
        tuple(name for name in names if name not in WAVE),
        tuple(name for name in names if name in WAVE),
        None if sample is None else Specimen.from_toml(sample),
    )
