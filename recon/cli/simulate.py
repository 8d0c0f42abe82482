"""`nearspin simulate`: specimen + instrument + protocol to a record."""

from __future__ import annotations

from pathlib import Path

import click

from recon.cli.common import SPREADINGS, diffusion_option, progress_line
from recon.counts.acquisition import Acquisition
from recon.errors import InputError
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.simulate import SimulationOptions, simulate
from recon.simulate.counts import simulate_counts
from recon.simulate.imperfections import Imperfections
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
@click.option(
    "--acquisition",
    type=click.Path(path_type=Path),
    default=None,
    help="TOML: frames, counts and tone. The output then holds photon counts.",
)
@click.option(
    "--flaws",
    type=click.Choice(["none", "typical"]),
    default="none",
    show_default=True,
    help="What goes wrong while counting.",
)
@diffusion_option
def verb(
    specimen: Path,
    instrument: Path,
    protocol: Path,
    output: Path,
    seed: int,
    jitter: float,
    acquisition: Path | None,
    flaws: str,
    diffusion: str | None,
) -> None:
    """Measure a described SPECIMEN with a described INSTRUMENT by the shots of PROTOCOL.

    The model is finer than the voxel grid and independent of the one that reconstructs.
    """
    table = Protocol.load(protocol)
    spreading = SPREADINGS[diffusion] if diffusion else None
    apparatus = Instrument.from_toml(instrument)
    table.check_reach(apparatus)
    options = SimulationOptions(wavevector_jitter=jitter, spreading=spreading)
    sample = Specimen.from_toml(specimen)
    if acquisition is not None:
        _count(sample, apparatus, table, acquisition, flaws, options, seed, output)
        return
    if flaws != "none":
        raise InputError("flaws belong to photon counts", "--flaws", "give --acquisition too")
    with progress_line() as line:
        record = simulate(
            sample,
            apparatus,
            table,
            options=options,
            seed=seed,
            progress=line.counted("simulating shots"),
            path=output,
        )
    click.echo(f"{output}: {len(record)} shots, {record.nbytes / 1e6:.1f} MB of samples")


def _count(
    specimen: Specimen,
    instrument: Instrument,
    protocol: Protocol,
    acquisition: Path,
    flaws: str,
    options: SimulationOptions,
    seed: int,
    output: Path,
) -> None:
    """Photon counts instead of samples."""
    if output.exists():
        raise InputError("exists already", str(output), "choose another name or remove it")
    wrong = Imperfections.typical() if flaws == "typical" else Imperfections()
    with progress_line() as line:
        record, _ = simulate_counts(
            specimen,
            instrument,
            protocol,
            Acquisition.from_toml(acquisition),
            output,
            flaws=wrong,
            seed=seed,
            options=options,
            progress=line.counted("simulating counts"),
        )
    click.echo(f"{output}: {len(record)} rows, {record.nbytes / 1e6:.1f} MB of counts")
