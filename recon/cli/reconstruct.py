"""`nearspin reconstruct`: a record to species maps or a cube."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from recon.cli.common import progress_line
from recon.errors import InputError
from recon.priors import (
    LocalLowRank,
    LowRank,
    NonNegative,
    Prior,
    TotalGeneralisedVariation,
    TotalVariation,
    UndecimatedWaveletSparsity,
    WaveletSparsity,
)
from recon.reconstruct import reconstruct
from recon.record import Record
from recon.result import Cube, Result, SpeciesMaps
from recon.solvers.estimate import Estimator
from recon.solvers.penalised import Penalised
from recon.solvers.replicas import Replicas
from recon.solvers.ridge import Ridge
from recon.solvers.weight import Fixed, SteinRisk
from recon.unknown import ComplexCube, SpeciesAmounts, Unknown

PRIORS: dict[str, Prior] = {
    "total-variation": TotalVariation(),
    "joint-total-variation": TotalVariation(joint=True),
    "total-generalised-variation": TotalGeneralisedVariation(),
    "wavelet": WaveletSparsity(),
    "joint-wavelet": WaveletSparsity(joint=True),
    "undecimated-wavelet": UndecimatedWaveletSparsity(),
    "low-rank": LowRank(),
    "local-low-rank": LocalLowRank(),
}
RIDGE = "ridge"


@click.command("reconstruct")
@click.argument("record", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("result.h5"))
@click.option("--cube", is_flag=True, help="The complex cube over time, without a line list.")
@click.option(
    "--prior",
    "priors",
    type=click.Choice([RIDGE, *PRIORS]),
    multiple=True,
    help="What is assumed; give several to combine them.",
)
@click.option("--weight", type=float, default=None, help="Of the prior; by default it is chosen.")
@click.option("--replicas", type=int, default=50, show_default=True, help="For errors; 0: none.")
@click.option("--memory-limit-gib", type=float, default=8.0, show_default=True)
def verb(
    record: Path,
    output: Path,
    cube: bool,
    priors: tuple[str, ...],
    weight: float | None,
    replicas: int,
    memory_limit_gib: float,
) -> None:
    """Amounts of the RECORD's species in mM, or its complex cube, with standard errors."""
    unknown: Unknown = ComplexCube() if cube else SpeciesAmounts()
    names = priors or (("joint-total-variation" if cube else "total-variation"),)
    with progress_line() as line:
        result = reconstruct(
            Record.open(record),
            unknown,
            estimator_named(names, unknown, weight, replicas),
            progress=line,
            memory_limit_gib=memory_limit_gib,
        )
    assert isinstance(result, (SpeciesMaps, Cube))
    result.save(output)
    click.echo(f"{output}: {summary(result)}")


def estimator_named(
    names: tuple[str, ...], unknown: Unknown, weight: float | None = None, replicas: int = 50
) -> Estimator:
    """The estimator behind priors' names; amounts are also taken as non-negative.

    Raises
    ------
    InputError
        Ridge is combined with another prior.
    """
    if RIDGE in names:
        if len(names) > 1:
            raise InputError("ridge is solved directly", "--prior", "give it alone")
        return Ridge(weight)
    bounds: tuple[Prior, ...] = (NonNegative(),) if unknown.real else ()
    rule = SteinRisk() if weight is None else Fixed(weight)
    errors = Replicas(replicas) if replicas else None
    priors = tuple(PRIORS[name] for name in names)
    return Penalised(priors + bounds, weight=rule, replicas=errors)


def summary(result: Result) -> str:
    """A few lines on a result."""
    account = result.account
    lines = [
        f"{account.prior}; weight {', '.join(f'{w:.3g}' for w in account.weights.values())}",
        f"  stopped: {account.why_stopped}; misfit {account.misfit:.4f} of the noise variance",
    ]
    if isinstance(result, SpeciesMaps):
        for place, name in enumerate(result.names):
            values = result.values[place]
            text = f"  {name}: mean {values.mean():.4g} mM, largest {values.max():.4g} mM"
            if result.standard_error is not None:
                error = float(np.sqrt((result.standard_error[place] ** 2).mean()))
                text += f", standard error {error:.3g} mM (r.m.s.)"
            lines.append(text)
    lines += [f"  note: {remark}" for remark in account.remarks]
    return "\n".join(lines)
