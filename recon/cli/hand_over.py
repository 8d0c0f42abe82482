"""`nearspin hand-over`: results to a dataset for an imaging group."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import click
import numpy as np

from recon.errors import InputError
from recon.handover.dataset import Delivery, Subject
from recon.handover.micrograph import on_grid
from recon.handover.placement import INSTRUMENT, Placement
from recon.result import Cube, SpeciesMaps, load_result


@click.command("hand-over")
@click.argument("results", type=click.Path(path_type=Path), nargs=-1, required=True)
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("dataset"))
@click.option("--subject", default="01", show_default=True, help="Letters and digits.")
@click.option(
    "--participant",
    "participant",
    multiple=True,
    metavar="COLUMN=VALUE",
    help="Of participants.tsv, which is written only if given; repeatable.",
)
@click.option(
    "--placement",
    type=click.Path(path_type=Path),
    default=None,
    help="TOML with frame and matrix_um (4 x 4), instrument to stage or microscope.",
)
@click.option("--micrograph", type=click.Path(path_type=Path), default=None)
@click.option("--pixel-um", type=float, default=None, help="Pixel edge of the micrograph.")
@click.option("--replace", is_flag=True, help="Replace an existing dataset.")
def verb(
    results: tuple[Path, ...],
    output: Path,
    subject: str,
    participant: tuple[str, ...],
    placement: Path | None,
    micrograph: Path | None,
    pixel_um: float | None,
    replace: bool,
) -> None:
    """Write RESULTS (species maps, a cube, or both) as one dataset of NIfTI files in OUTPUT."""
    maps: SpeciesMaps | None = None
    cube: Cube | None = None
    for path in results:
        result = load_result(path)
        if isinstance(result, Cube):
            if cube is not None:
                raise InputError("a second cube", str(path), "give one cube")
            cube = result
        else:
            if maps is not None:
                raise InputError("second species maps", str(path), "give one of each")
            maps = result
    grid = (maps or cube).grid  # type: ignore[union-attr]
    delivery = Delivery(
        maps=maps,
        cube=cube,
        placement=INSTRUMENT if placement is None else read_placement(placement),
        subject=Subject(subject, columns(participant)),
        micrograph=None if micrograph is None else on_grid(micrograph, grid, pixel_um),
    )
    written = delivery.write(output, replace=replace)
    click.echo(f"{output}: {len(written)} files")
    for path in written:
        click.echo(f"    {path}")


def columns(pairs: tuple[str, ...]) -> dict[str, str]:
    """COLUMN=VALUE pairs as a row of participants.tsv.

    Raises
    ------
    InputError
        A pair without `=`, or with a tab or a line break.
    """
    row = {}
    for pair in pairs:
        name, sign, value = pair.partition("=")
        if not (name and sign and value) or any(one in pair for one in "\t\r\n"):
            raise InputError(f"'{pair}' is no COLUMN=VALUE", "--participant")
        row[name] = value
    return row


def read_placement(path: Path) -> Placement:
    """A placement from TOML: `frame` (text) and `matrix_um` (4 × 4 numbers).

    Raises
    ------
    InputError
        The file is missing or no TOML, or the matrix is no rigid motion.
    """
    try:
        facts: dict[str, Any] = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise InputError(f"cannot be read ({error})", str(path)) from error
    unknown = set(facts) - {"frame", "matrix_um"}
    if unknown:
        raise InputError(f"unknown field '{sorted(unknown)[0]}'", str(path), "frame or matrix_um")
    if "matrix_um" not in facts:
        raise InputError("field 'matrix_um' is missing", str(path), "give a 4 x 4 matrix")
    try:
        matrix = np.asarray(facts["matrix_um"], float)
    except (TypeError, ValueError) as error:
        raise InputError("matrix_um must be 4 x 4 numbers", str(path)) from error
    return Placement.from_matrix(matrix, str(facts.get("frame", "stage")))
