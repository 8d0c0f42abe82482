"""`nearspin protocol`: a table of shots from a rule."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import click
import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.instrument import Instrument
from recon.planning.indirect import Evolutions, undersampling
from recon.planning.tables import (
    FullRaster,
    LowDiscrepancy,
    NoSensorGradient,
    SensorRing,
    Table,
    UniformRandom,
    VariableDensity,
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
@click.option(
    "--encoding-ms", type=float, default=0.0, show_default=True, help="Length of the pulse."
)
@click.option(
    "--evolution-ms",
    default=None,
    metavar="T,T,... or START:STEP:COUNT",
    help="Evolution times t1 before the encoding; each shot gets one, in a random order.",
)
@click.option("--evolutions-per-wavevector", type=click.IntRange(1), default=1, show_default=True)
@click.option(
    "--evolution-weight-ms", type=float, default=None, help="Draw late t1 less, by exp(-t1/this)."
)
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
    encoding_ms: float,
    evolution_ms: str | None,
    evolutions_per_wavevector: int,
    evolution_weight_ms: float | None,
    seed: int,
) -> None:
    """Make the table of shots for the grid of SPECIMEN, within the reach of INSTRUMENT.

    With --evolution-ms the spectral axis is indirect: the number of wavevectors is --shots over
    --evolutions-per-wavevector, and --samples counts the samples after each.
    """
    wavevectors = shots if evolution_ms is None else -(-shots // evolutions_per_wavevector)
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
        "uniform": UniformRandom(shots=wavevectors, **common),  # type: ignore[arg-type]
        "low-discrepancy": LowDiscrepancy(shots=wavevectors, **common),  # type: ignore[arg-type]
        "variable-density": VariableDensity(shots=wavevectors, **common),  # type: ignore[arg-type]
    }
    grid = Specimen.from_toml(specimen).grid
    axis = SpectralAxis.LISTEN_AFTER_ENCODING if listen else SpectralAxis.EVOLVE_THEN_ENCODE
    protocol = tables[rule].protocol(
        grid,
        sampled_times(samples, sample_interval_ms, encoding_ms, listen),
        averages=averages,
        shot_duration=shot_duration_s,
        spectral_axis=axis,
    )
    protocol = replace(protocol, encoding_duration=encoding_ms * 1e-3)
    if evolution_ms is not None:
        weight = None if evolution_weight_ms is None else evolution_weight_ms * 1e-3
        times = evolution_times(evolution_ms)
        evolutions = Evolutions(times, evolutions_per_wavevector, weight, seed)
        protocol = evolutions.spread_over(protocol)
    protocol.check_reach(Instrument.from_toml(instrument))
    protocol.save(output)
    factor = undersampling(protocol, grid.shape[1] * grid.shape[2])
    full = "full phase encoding" + ("" if evolution_ms is None else " at every evolution time")
    click.echo(f"{output}: {len(protocol)} shots, {factor:.1f} times fewer than {full}")


def sampled_times(
    samples: int, interval_ms: float, encoding_ms: float, listen: bool
) -> NDArray[np.float64]:
    """Sample times in seconds; listening begins when the pulse ends."""
    if not interval_ms > 0:
        raise InputError("--sample-interval-ms must be positive", "protocol")
    if not encoding_ms >= 0:
        raise InputError("--encoding-ms must not be negative", "protocol")
    start = encoding_ms if listen else 0.0
    return np.asarray((start + np.arange(samples) * interval_ms) * 1e-3, np.float64)


def evolution_times(text: str) -> tuple[float, ...]:
    """Seconds from milliseconds as `0,5,10` or `0:5:16` (start, step, count).

    Raises
    ------
    InputError
        The text is neither.
    """
    try:
        if ":" in text:
            start, step, count = text.split(":")
            times = float(start) + float(step) * np.arange(int(count))
        else:
            times = np.array([float(part) for part in text.split(",")])
    except ValueError as error:
        mend = "write 0,5,10 or start:step:count"
        raise InputError(f"'{text}' is no list of times", "--evolution-ms", mend) from error
    return tuple((times * 1e-3).tolist())
