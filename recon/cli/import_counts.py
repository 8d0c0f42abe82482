"""`nearspin import`: plain files of counts to a record of counts."""

from __future__ import annotations

from pathlib import Path

import click

from recon.cli.common import progress_line
from recon.counts.importer import import_counts


@click.command("import")
@click.argument("sidecar", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("counts.h5"))
@click.option("--plain", is_flag=True, help="Without compression: larger, faster to read.")
def verb(sidecar: Path, output: Path, plain: bool) -> None:
    """Read counts from NumPy, TIFF or CSV files as the TOML file SIDECAR describes them."""
    with progress_line() as line:
        imported = import_counts(sidecar, output, compression=None if plain else 1, progress=line)
    for remark in imported.remarks:
        click.echo(f"note: {remark}")
    record = imported.record
    click.echo(f"{output}: {len(record)} rows, {record.nbytes / 1e6:.1f} MB of counts")
