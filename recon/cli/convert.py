"""`nearspin convert`: counts to samples in tesla."""

from __future__ import annotations

from pathlib import Path

import click

from recon.cli.common import progress_line
from recon.counts.conversion import Conversion, Settings, convert
from recon.counts.record import CountsRecord
from recon.counts.reference import EveryFrame, LaserTimesChannel, Reference, WindowMean

REFERENCES: dict[str, Reference] = {
    "every-frame": EveryFrame(),
    "window-mean": WindowMean(),
    "laser-times-channel": LaserTimesChannel(),
}


@click.command("convert")
@click.argument("counts", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("record.h5"))
@click.option(
    "--reference",
    type=click.Choice([*REFERENCES]),
    default=None,
    help="How reference counts are read; by default the way that leaves least noise.",
)
@click.option("--without-tone", is_flag=True, help="Response from contrast and description.")
@click.option("--keep-mains", is_flag=True, help="Do not look for pickup from the mains.")
@click.option("--keep-common-noise", is_flag=True, help="Leave in what all channels share.")
def verb(
    counts: Path,
    output: Path,
    reference: str | None,
    without_tone: bool,
    keep_mains: bool,
    keep_common_noise: bool,
) -> None:
    """Turn the photon COUNTS into samples in tesla with their noise."""
    settings = Settings(
        REFERENCES[reference] if reference else None,
        tone=not without_tone,
        mains=not keep_mains,
        common_noise=not keep_common_noise,
    )
    with progress_line() as line:
        done = convert(CountsRecord.open(counts), output, settings, progress=line)
    click.echo(f"{output}: {summary(done)}")


def summary(done: Conversion) -> str:
    """A few lines on a conversion."""
    record, acquisition = done.record, done.acquisition
    alias = acquisition.alias(record.instrument)
    side = ", upside down" if alias.reversed else ""
    lines = [
        f"{len(record)} shots, {record.nbytes / 1e6:.1f} MB of samples",
        f"  carrier {acquisition.carrier(record.instrument):.8g} Hz, seen at "
        f"{alias.frequency:.6g} Hz among {1 / acquisition.frame_interval:.6g} frames per second "
        f"(zone {alias.zone}{side})",
        f"  {done.channels}",
        f"  noise {record.noise_sd * 1e9:.4g} nT per sample and channel at one average",
        f"  reference: {type(done.inspection.reference).__name__}",
    ]
    pickup = done.inspection.pickup
    if pickup is not None:
        lines.append(
            f"  mains at {pickup.frequency_Hz:.4f} ± {pickup.standard_error_Hz:.2g} Hz, "
            f"{len(pickup.lines)} multiples removed"
        )
    return "\n".join([*lines, *(f"  note: {one}" for one in done.findings)])
