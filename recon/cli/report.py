"""`nearspin report`: a page about one result, for a browser."""

from __future__ import annotations

from pathlib import Path

import click

from recon.errors import InputError
from recon.record import Record
from recon.report import Content, write_page
from recon.result import Cube, SpeciesMaps
from recon.specimen import Specimen


@click.command("report")
@click.argument("maps", type=click.Path(path_type=Path))
@click.argument("cube", type=click.Path(path_type=Path))
@click.argument("record", type=click.Path(path_type=Path))
@click.option("--truth", type=click.Path(path_type=Path), default=None, help="Specimen TOML.")
@click.option("--title", default="Slice on a sensor", show_default=True)
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("report.html"))
def verb(
    maps: Path, cube: Path, record: Path, truth: Path | None, title: str, output: Path
) -> None:
    """Write one self-contained page on MAPS and CUBE, both reconstructed from RECORD."""
    measured = Record.open(record)
    known = measured.specimen
    amounts = None
    if truth is not None:
        specimen = Specimen.from_toml(truth)
        if specimen.names != known.names:
            raise InputError("holds other species than the record", str(truth))
        amounts = specimen.concentrations
    content = Content(
        SpeciesMaps.load(maps),
        Cube.load(cube),
        known.species,
        measured.instrument,
        measured.protocol,
        amounts,
        title=title,
        notes=known.notes,
    )
    write_page(output, content)
    click.echo(f"{output}: {output.stat().st_size / 1e6:.1f} MB, opens in a browser")
