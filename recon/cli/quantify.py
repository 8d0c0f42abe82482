"""`nearspin quantify`: a cube to amounts with errors."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from recon.cli.common import progress_line
from recon.quantify import (
    Baseline,
    CalibratedResponse,
    Fit,
    Nuisance,
    ReferenceSpecies,
    patterns_of,
)
from recon.record import Record
from recon.result import Account, Cube, SpeciesMaps


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
) -> None:
    """Fit every voxel of CUBE with the species of the RECORD it came from."""
    held, measured = Cube.load(cube), Record.open(record)
    patterns = patterns_of(measured.specimen.species, measured.instrument, held)
    settings = Fit(
        shift_Hz=Nuisance(shift_bound, 3.0),
        decay_per_s=Nuisance(np.pi * width_bound, 5.0),
        phase_rad=Nuisance(np.radians(phase_bound_deg), 0.1),
        baseline=Baseline(baseline_ms),
    )
    if (reference is None) != (reference_amount is None):
        raise click.UsageError("give --reference and --reference-mM together")
    with progress_line() as line:
        fitted = settings.fit(held, patterns, progress=line.counted("fitting spectra"))
    if reference is not None and reference_amount is not None:
        scale = ReferenceSpecies(reference, reference_amount, scale_error)
        values, error = scale.apply(fitted.names, fitted.amounts, fitted.standard_error)
    else:
        known = CalibratedResponse(scale_error)
        values, error = known.apply(fitted.names, fitted.amounts, fitted.standard_error)
    failed = fitted.failed_assumption()
    remarks = (f"assumption refused by the data: {failed}",) if failed else ()
    SpeciesMaps(
        grid=held.grid,
        values=values.astype(np.float32),
        standard_error=error.astype(np.float32),
        account=Account(
            prior=f"{held.account.prior}; then a fit of known lines in every voxel",
            weights=held.account.weights,
            why_stopped=held.account.why_stopped,
            misfit=float(np.median(fitted.chi_squared)),
            provenance=held.account.provenance,
            remarks=(*held.account.remarks, *remarks),
        ),
        names=fitted.names,
    ).save(output)
    click.echo(f"{output}: {len(fitted.names)} species")
    heads = ("mean", "error", "detection", "quantify")
    click.echo(f"{'lowest, mM':<14}" + "".join(f"{head:>12}" for head in heads))
    for place, name in enumerate(fitted.names):
        typical = float(np.sqrt((error[place, 0].astype(float) ** 2).mean()))
        mean = float(values[place, 0].mean())
        numbers = (mean, typical, 3.3 * typical, 10 * typical)
        click.echo(f"{name:<14}" + "".join(f"{number:>12.4g}" for number in numbers))
    for remark in remarks:
        click.echo(f"note: {remark}")
