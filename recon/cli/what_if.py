"""`nearspin what-if`: the detection limit over two numbers of the descriptions."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from recon import figures
from recon.cli.common import progress_line
from recon.errors import InputError
from recon.instrument import Instrument
from recon.planning.bound import Expectation, Experiment
from recon.planning.sweep import Dial, sweep
from recon.protocol import Protocol
from recon.specimen import Specimen


@click.command("what-if")
@click.argument("specimen", type=click.Path(path_type=Path))
@click.argument("instrument", type=click.Path(path_type=Path))
@click.argument("protocol", type=click.Path(path_type=Path))
@click.argument("first")
@click.argument("second")
@click.option("--species", "name", default=None, help="Which species; the first by default.")
@click.option("--plane", type=click.IntRange(0), default=0, show_default=True)
@click.option("--feature-um", type=float, default=20.0, show_default=True)
@click.option("-o", "--output", type=click.Path(path_type=Path), default=None, help="A picture.")
def verb(
    specimen: Path,
    instrument: Path,
    protocol: Path,
    first: str,
    second: str,
    name: str | None,
    plane: int,
    feature_um: float,
    output: Path | None,
) -> None:
    """Detection limit in mM over FIRST and SECOND, each written as NAME=NUMBER,NUMBER,...

    NAME is a path in the description, such as instrument.sensor_layer.depth_um,
    instrument.bias_field_mT.z or species.lactate.polarisation, or one of grid.voxel_um,
    protocol.averages, expectation.feature_um, readout.noise_gain.
    """
    dials = Dial.parse(first), Dial.parse(second)
    sample = Specimen.from_toml(specimen)
    spread = np.maximum(sample.concentrations.std((1, 2, 3)), 1e-6)
    setting = Experiment(
        Instrument.from_toml(instrument),
        sample.grid,
        sample.species,
        Expectation(tuple(float(s) for s in spread), feature_um),
    )
    if plane >= sample.grid.shape[0]:
        raise InputError(
            f"there is no plane {plane}", "--plane", f"0 to {sample.grid.shape[0] - 1}"
        )
    species = 0 if name is None else sample.index(name)
    with progress_line() as line:
        table = sweep(
            setting, Protocol.load(protocol), *dials, species, plane, line.counted("sweeping")
        )
    height = sample.grid.heights[plane] * 1e6
    quantity = f"detection limit of {sample.names[species]} at {height:g} µm"
    click.echo(f"{quantity}, mM; down: {dials[0].name}, across: {dials[1].name}")
    click.echo(" " * 12 + "".join(f"{value:>12g}" for value in dials[1].values))
    for value, row in zip(dials[0].values, table, strict=True):
        click.echo(f"{value:>12g}" + "".join(f"{limit:>12.4g}" for limit in row))
    if output is not None:
        picture = figures.sweep(
            table,
            (dials[0].name, dials[0].values),
            (dials[1].name, dials[1].values),
            quantity=quantity,
            unit="mM",
        )
        click.echo(f"{figures.save(picture, output)}")
