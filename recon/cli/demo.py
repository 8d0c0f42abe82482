"""`nearspin demo`: the whole job on an invented muscle section."""

from __future__ import annotations

from pathlib import Path

import click

from recon.cli.common import progress_line
from recon.demo import Demo, Step


@click.command("demo")
@click.argument("folder", type=click.Path(path_type=Path), default=Path("nearspin-demo"))
@click.option("--seed", type=int, default=0, show_default=True)
def verb(folder: Path, seed: int) -> None:
    """Run an invented muscle section from description to NIfTI files and figures in FOLDER."""
    total = 0.0
    with progress_line() as line:
        for step in Demo(folder, seed, line).run():
            line.clear()
            if isinstance(step, Step):
                total += step.seconds
                click.echo(f"{step.what} ({step.seconds:.1f} s)")
                for file in step.files:
                    click.echo(f"    {file}")
            else:
                click.echo(step)
    click.echo(f"done in {total:.0f} s. Research use only, not for diagnosis.")
