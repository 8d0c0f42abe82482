"""`nearspin specimen`: an invented muscle section, or a specimen from an image."""

from __future__ import annotations

from pathlib import Path

import click

from recon.cli.common import progress_line
from recon.errors import InputError
from recon.grid import Grid
from recon.specimen import Specimen
from recon.specimens.from_image import specimen_from_image
from recon.specimens.level_table import load_level_table
from recon.specimens.muscle import Muscle

SIZES = {"small": Muscle.small, "medium": Muscle.medium, "large": Muscle.large}


@click.group("specimen")
def verb() -> None:
    """Make a specimen: invented muscle, or from an image of known pixel size."""


@verb.command("muscle")
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("specimen.toml"))
@click.option("--size", type=click.Choice(list(SIZES)), default="small", show_default=True)
@click.option("--seed", type=int, default=0, show_default=True)
def muscle(output: Path, size: str, seed: int) -> None:
    """An invented cross-section of exercised skeletal muscle."""
    with progress_line() as line:
        line("drawing fibres and droplets")
        specimen = SIZES[size](seed).specimen()
    _save(specimen, output)


@verb.command("from-image")
@click.argument("image", type=click.Path(path_type=Path))
@click.argument("levels", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("specimen.toml"))
@click.option("--pixel-um", type=float, default=None, help="Pixel edge of the image.")
@click.option("--shape", type=int, nargs=3, default=(6, 64, 64), show_default=True)
@click.option("--voxel-um", type=float, nargs=3, default=(4.0, 4.0, 4.0), show_default=True)
@click.option("--base-height-um", type=float, default=0.0, show_default=True)
@click.option("--refinement", type=int, nargs=3, default=(2, 3, 3), show_default=True)
def from_image(
    image: Path,
    levels: Path,
    output: Path,
    pixel_um: float | None,
    shape: tuple[int, int, int],
    voxel_um: tuple[float, float, float],
    base_height_um: float,
    refinement: tuple[int, int, int],
) -> None:
    """IMAGE (PNG, TIFF stack, NIfTI) and the table LEVELS (TOML: level to mM) to a specimen.

    Counts and edges run z, y, x. What a level holds is an assumption, and the output says so.
    """
    dz, dy, dx = voxel_um
    if not min(voxel_um) > 0:
        raise InputError(f"voxel edges {voxel_um} must be positive", "--voxel-um")
    grid = Grid(shape, (dz * 1e-6, dy * 1e-6, dx * 1e-6), base_height_um * 1e-6)
    table = load_level_table(levels)
    specimen = specimen_from_image(image, table, grid, pixel_um=pixel_um, refinement=refinement)
    _save(specimen, output)


def _save(specimen: Specimen, output: Path) -> None:
    specimen.save(output)
    nz, ny, nx = specimen.grid.shape
    click.echo(f"{output}: {', '.join(specimen.names)} on {nz} x {ny} x {nx} voxels (z, y, x)")
    click.echo(specimen.notes)
