"""`nearspin quantify`: a cube to amounts with errors."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import click
import numpy as np

from recon import figures as figures_of
from recon.basis import species_lines
from recon.cli.common import ProgressLine, progress_line
from recon.errors import InputError
from recon.grid import Grid
from recon.instrument import Instrument
from recon.quantify import (
    Baseline,
    CalibratedResponse,
    FieldShift,
    Fit,
    Fitted,
    LineRemoval,
    Nuisance,
    Pattern,
    ReferenceSpecies,
    ShiftEstimate,
    compare,
    labels,
    limits,
    patterns_of,
    refused,
)
from recon.quantify.agreement import in_words
from recon.quantify.drawing import voxel_figure
from recon.record import Record
from recon.result import Account, Cube, SpeciesMaps
from recon.specimen import Species


@click.command("quantify")
@click.argument("cube", type=click.Path(path_type=Path))
@click.argument("record", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("amounts.h5"))
@click.option("--shift-bound-Hz", "shift_bound", type=float, default=30.0, show_default=True)
@click.option("--width-bound-Hz", "width_bound", type=float, default=20.0, show_default=True)
@click.option("--phase-bound-deg", type=float, default=0.0, show_default=True)
@click.option("--baseline-ms", type=float, multiple=True, help="Decay of a broad baseline.")
@click.option("--reference", default=None, help="Species of known amount that sets the scale.")
@click.option("--reference-mM", "reference_amount", type=float, default=None)
@click.option(
    "--strong-line-ppm",
    type=float,
    default=None,
    help="Take this line, such as water's, out of every voxel first.",
)
@click.option(
    "--field-shift", is_flag=True, help="Take a smooth static field shift out of the cube first."
)
@click.option(
    "--maps", type=click.Path(path_type=Path), default=None, help="Direct amounts to compare with."
)
@click.option(
    "--figures", type=click.Path(path_type=Path), default=None, help="Folder to draw into."
)
@click.option(
    "--voxel",
    "voxels",
    multiple=True,
    metavar="Z,Y,X",
    help="Draw this voxel's spectrum and fit too (with --figures); repeatable.",
)
@click.option("--memory-limit-gib", type=float, default=8.0, show_default=True)
@click.option("--scale-error", type=float, default=0.0, help="Relative error of the scale.")
def verb(
    cube: Path,
    record: Path,
    output: Path,
    shift_bound: float,
    width_bound: float,
    phase_bound_deg: float,
    baseline_ms: tuple[float, ...],
    reference: str | None,
    reference_amount: float | None,
    scale_error: float,
    strong_line_ppm: float | None,
    field_shift: bool,
    maps: Path | None,
    figures: Path | None,
    voxels: tuple[str, ...],
    memory_limit_gib: float,
) -> None:
    """Fit every voxel of CUBE with the species of the RECORD it came from."""
    if (reference is None) != (reference_amount is None):
        raise click.UsageError("give --reference and --reference-mM together")
    held, measured = Cube.load(cube), Record.open(record)
    places = [voxel_named(text, held) for text in voxels]
    before = len(held.account.remarks)
    settings = Fit(
        shift_Hz=Nuisance(shift_bound, 3.0),
        decay_per_s=Nuisance(np.pi * width_bound, 5.0),
        phase_rad=Nuisance(np.radians(phase_bound_deg), 0.1),
        baseline=Baseline(baseline_ms),
    )
    with progress_line() as line:
        held, patterns = without_line(held, measured, strong_line_ppm, line)
        moved = ShiftEstimate(shift_bound).estimate(held, patterns) if field_shift else None
        held = held if moved is None else moved.corrected(held)
        counted = line.counted("fitting spectra")
        fitted = settings.fit(held, patterns, None, counted, memory_limit_gib)
    scale: CalibratedResponse | ReferenceSpecies = CalibratedResponse(scale_error)
    if reference is not None and reference_amount is not None:
        scale = ReferenceSpecies(reference, reference_amount, scale_error)
    scaled = scale.on(fitted)
    remarks = judged(held, scaled, patterns, maps)
    result = amounts_of(held, scaled, remarks)
    result.save(output)
    click.echo(f"{output}: {len(scaled.names)} species")
    click.echo(table(scaled, held.grid))
    for remark in (*held.account.remarks[before:], *remarks):
        click.echo(f"note: {remark}")
    if figures is not None:
        written = draw(result, moved, figures)
        written += draw_voxels(held, fitted, patterns, places, figures)
        for path in written:
            click.echo(f"    {path}")


def without_line(
    cube: Cube, measured: Record, strong_line_ppm: float | None, line: ProgressLine
) -> tuple[Cube, list[Pattern]]:
    """The cube without the strong line, if one is named, and the patterns that are left."""
    species: Sequence[Species] = measured.specimen.species
    if strong_line_ppm is None:
        return cube, patterns_of(species, measured.instrument, cube)
    removal = LineRemoval(strong_line_ppm)
    weak = weak_species(species, measured.instrument, cube, removal)
    patterns = patterns_of(weak, measured.instrument, cube)
    counted = line.counted("taking out the strong line")
    return removal.remove(cube, patterns, progress=counted).cube, patterns


def judged(
    cube: Cube, fitted: Fitted, patterns: Sequence[Pattern], maps: Path | None
) -> tuple[str, ...]:
    """Remarks on what the cube refuses, and on the agreement with direct maps, if given."""
    if maps is not None:
        return compare(SpeciesMaps.load(maps), fitted, cube, patterns).remarks()
    found = refused(cube, patterns)
    told = in_words(found) if found else fitted.failed_assumption()
    return (f"assumption refused by the data: {told}",) if told else ()


def voxel_named(text: str, cube: Cube) -> tuple[int, int, int]:
    """A voxel from `z,y,x`, counted from 0.

    Raises
    ------
    InputError
        The text is no voxel of the cube.
    """
    try:
        z, y, x = (int(part) for part in text.split(","))
    except ValueError as error:
        raise InputError(f"'{text}' is no voxel", "--voxel", "write z,y,x, from 0") from error
    if not all(0 <= at < n for at, n in zip((z, y, x), cube.grid.shape, strict=True)):
        nz, ny, nx = (count - 1 for count in cube.grid.shape)
        raise InputError(f"'{text}' is outside the cube", "--voxel", f"at most {nz},{ny},{nx}")
    return z, y, x


def draw_voxels(
    cube: Cube,
    fitted: Fitted,
    patterns: Sequence[Pattern],
    places: Sequence[tuple[int, int, int]],
    folder: Path,
) -> list[Path]:
    """Spectrum, fit, residual and error band of chosen voxels."""
    written = []
    for place in places:
        picture = voxel_figure(cube, fitted, patterns, place)
        name = "-".join(str(number) for number in place)
        written.append(figures_of.save(picture, folder / f"voxel-{name}.png"))
    return written


def weak_species(
    species: Sequence[Species], instrument: Instrument, cube: Cube, removal: LineRemoval
) -> list[Species]:
    """Those whose lines are not what is removed."""
    reference, frequency = cube.reference_shift_ppm, cube.larmor_frequency
    return [
        one
        for one in species
        if not removal.covers(species_lines(one, instrument, reference), reference, frequency)
    ]


def amounts_of(cube: Cube, fitted: Fitted, remarks: tuple[str, ...]) -> SpeciesMaps:
    """The fit as maps with labels; the limits stand in the account's provenance."""
    account = cube.account
    return SpeciesMaps(
        grid=cube.grid,
        values=fitted.amounts,
        standard_error=fitted.standard_error,
        account=Account(
            prior=f"{account.prior}; then a fit of known lines in every voxel",
            weights=account.weights,
            why_stopped=account.why_stopped,
            misfit=float(np.median(fitted.chi_squared)),
            provenance={**account.provenance, "limits": limits(fitted).facts()},
            remarks=(*account.remarks, *remarks),
        ),
        names=fitted.names,
        labels=labels(fitted),
    )


def table(fitted: Fitted, grid: Grid) -> str:
    """Mean, error and limits of every species at every depth, and the share worth reading."""
    reach, readable = limits(fitted), labels(fitted).readable
    heads = ("height µm", "mean", "error", "detection", "quantify", "readable")
    lines = [f"{'mM':<14}" + "".join(f"{head:>11}" for head in heads)]
    for place, name in enumerate(fitted.names):
        for level, values in enumerate(fitted.amounts[place]):
            spread = fitted.standard_error[place, level]
            spread = spread[np.isfinite(spread)]
            error = float(np.sqrt((spread.astype(float) ** 2).mean())) if spread.size else np.inf
            low, high = reach.detection[place, level], reach.quantification[place, level]
            numbers = (float(values.mean()), error, float(low), float(high))
            share = f"{100 * readable[place, level].mean():.0f} %"
            cells = [
                f"{grid.heights[level] * 1e6:>11.3g}",
                *(f"{number:>11.4g}" for number in numbers),
            ]
            lines.append(f"{name if level == 0 else '':<14}" + "".join(cells) + f"{share:>11}")
    lines.append("limits: 3.3 and 10 standard errors of the blank (ICH Q2), one voxel, by height")
    return "\n".join(lines)


def draw(result: SpeciesMaps, moved: FieldShift | None, folder: Path) -> list[Path]:
    """Labels, every species' planes with their errors beside them, and the field shift, if any."""
    assert result.labels is not None
    assert result.standard_error is not None
    picture = figures_of.label_maps(result.labels, result.names, result.grid)
    written = [figures_of.save(picture, folder / "labels.png")]
    for name, values, error in zip(result.names, result.values, result.standard_error, strict=True):
        stack = figures_of.depth_stack(values, error, result.grid, quantity=name, unit="mM")
        written.append(figures_of.save(stack, folder / f"{name}-planes.png"))
    if moved is not None:
        stack = figures_of.depth_stack(
            moved.shift_Hz, moved.standard_error_Hz, moved.grid, quantity="field shift", unit="Hz"
        )
        written.append(figures_of.save(stack, folder / "field-shift.png"))
    return written
