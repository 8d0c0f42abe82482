"""`nearspin protocol`: a table of shots from a rule."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from recon.errors import InputError
from recon.instrument import Instrument
from recon.planning.tables import (
    FullRaster,
    LowDiscrepancy,
    NoSensorGradient,
    SensorRing,
    Table,
    UniformRandom,
    VariableDensity,
    lateral_factor,
)
from recon.protocol import SpectralAxis
from recon.specimen import Specimen

RULES = ("raster", "uniform", "variable-density", "low-discrepancy")


@click.command("protocol")
@click.argument("specimen", type=click.Path(path_type=Path))
@click.argument("instrument", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("protocol.h5"))
@click.option("--rule", type=click.Choice(RULES), default="variable-density", show_default=True)
@click.option("--shots", type=click.IntRange(1), default=80, show_default=True)
@click.option("--averages", type=click.IntRange(1), default=1, show_default=True)
@click.option("--axis", "axes", type=int, multiple=True, default=(1,), help="Sensing axis, 1 to 4.")
@click.option("--axial-bound-rad-per-um", type=float, default=0.0, show_default=True)
@click.option("--sensor-ring-rad-per-um", type=float, default=0.0, help="0: no sensor gradient.")
@click.option("--sample-interval-ms", type=float, default=8.0, show_default=True)
@click.option("--samples", type=click.IntRange(1), default=32, show_default=True)
@click.option("--shot-duration-s", type=float, default=1.0, show_default=True)
@click.option("--listen", is_flag=True, help="Record after the gradient, not after the evolution.")
@click.option("--seed", type=int, default=0, show_default=True)
def verb(
    specimen: Path,
    instrument: Path,
    output: Path,
    rule: str,
    shots: int,
    averages: int,
    axes: tuple[int, ...],
    axial_bound_rad_per_um: float,
    sensor_ring_rad_per_um: float,
    sample_interval_ms: float,
    samples: int,
    shot_duration_s: float,
    listen: bool,
    seed: int,
) -> None:
    """Make the table of shots for the grid of SPECIMEN, within the reach of INSTRUMENT."""
    ring = sensor_ring_rad_per_um
    sensor = SensorRing((ring,)) if ring > 0 else NoSensorGradient()
    common = {
        "axes": axes,
        "axial_bound_rad_per_um": axial_bound_rad_per_um,
        "sensor": sensor,
        "seed": seed,
    }
    tables: dict[str, Table] = {
        "raster": FullRaster(**common),  # type: ignore[arg-type]
        "uniform": UniformRandom(shots=shots, **common),  # type: ignore[arg-type]
        "low-discrepancy": LowDiscrepancy(shots=shots, **common),  # type: ignore[arg-type]
        "variable-density": VariableDensity(shots=shots, **common),  # type: ignore[arg-type]
    }
    if not sample_interval_ms > 0:
        raise InputError("--sample-interval-ms must be positive", "protocol")
    grid = Specimen.from_toml(specimen).grid
    axis = SpectralAxis.LISTEN_AFTER_ENCODING if listen else SpectralAxis.EVOLVE_THEN_ENCODE
    protocol = tables[rule].protocol(
        grid,
        np.arange(samples) * sample_interval_ms * 1e-3,
        averages=averages,
        shot_duration=shot_duration_s,
        spectral_axis=axis,
    )
    protocol.check_reach(Instrument.from_toml(instrument))
    protocol.save(output)
    click.echo(
        f"{output}: {len(protocol)} shots, {lateral_factor(protocol, grid):.1f} times fewer than "
        "full phase encoding"
    )
