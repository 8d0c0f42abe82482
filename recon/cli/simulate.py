"""`nearspin simulate`: specimen + instrument + protocol to a record."""

from __future__ import annotations

from pathlib import Path

import click

from recon.cli.common import SPREADINGS, diffusion_option, progress_line
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.simulate import SimulationOptions, simulate
from recon.specimen import Specimen


@click.command("simulate")
@click.argument("specimen", type=click.Path(path_type=Path))
@click.argument("instrument", type=click.Path(path_type=Path))
@click.argument("protocol", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("record.h5"))
@click.option("--seed", type=int, default=0, show_default=True, help="Of the photon noise.")
@click.option(
    "--jitter",
    type=float,
    default=0.0,
    help="Relative standard deviation of every wavevector component.",
)
@diffusion_option
def verb(
    specimen: Path,
    instrument: Path,
    protocol: Path,
    output: Path,
    seed: int,
    jitter: float,
    diffusion: str | None,
) -> None:
    """Measure a described SPECIMEN with a described INSTRUMENT by the shots of PROTOCOL.

    The model is finer than the voxel grid and independent of the one that reconstructs.
    """
    table = Protocol.load(protocol)
    spreading = SPREADINGS[diffusion] if diffusion else None
    apparatus = Instrument.from_toml(instrument)
    table.check_reach(apparatus)
    with progress_line() as line:
        record = simulate(
            Specimen.from_toml(specimen),
            apparatus,
            table,
            options=SimulationOptions(wavevector_jitter=jitter, spreading=spreading),
            seed=seed,
            progress=line.counted("simulating shots"),
            path=output,
        )
    click.echo(f"{output}: {len(record)} shots, {record.nbytes / 1e6:.1f} MB of samples")
