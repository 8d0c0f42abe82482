"""`nearspin reconstruct`: a record to species maps or a cube."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from recon.cli.common import SPREADINGS, diffusion_option, progress_line
from recon.errors import InputError
from recon.forward.channels import Channels
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
from recon.reconstruct import Reality, reconstruct
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
@click.option(
    "--channel-gain",
    type=click.Path(path_type=Path),
    default=None,
    help="NumPy file (rows, columns): gain of every channel, 0 where it is dead.",
)
@diffusion_option
@click.option("--memory-limit-gib", type=float, default=8.0, show_default=True)
def verb(
    record: Path,
    output: Path,
    cube: bool,
    priors: tuple[str, ...],
    weight: float | None,
    replicas: int,
    channel_gain: Path | None,
    diffusion: str | None,
    memory_limit_gib: float,
) -> None:
    """Amounts of the RECORD's species in mM, or its complex cube, with standard errors."""
    unknown = unknown_named(cube, diffusion)
    measured = Record.open(record)
    names = priors or default_names(cube, measured)
    with progress_line() as line:
        result = reconstruct(
            measured,
            unknown,
            estimator_named(names, unknown, weight, replicas),
            progress=line,
            memory_limit_gib=memory_limit_gib,
            reality=reality_of(channel_gain),
        )
    assert isinstance(result, (SpeciesMaps, Cube))
    result.save(output)
    click.echo(f"{output}: {summary(result)}")


def default_names(cube: bool, record: Record) -> tuple[str, ...]:
    """The names of what `recon.reconstruct` assumes by default."""
    if not cube:
        return ("total-variation",)
    indirect = len(record.protocol.evolutions[0]) > 1
    return ("joint-total-variation", *(("local-low-rank",) if indirect else ()))


def unknown_named(cube: bool, diffusion: str | None) -> Unknown:
    """The cube, or amounts with or without diffusion in their model.

    Raises
    ------
    InputError
        Diffusion is wanted for a cube, whose components have no species.
    """
    if not cube:
        return SpeciesAmounts(spreading=SPREADINGS[diffusion] if diffusion else None)
    if diffusion:
        raise InputError("a cube knows no species that diffuse", "--diffusion", "leave out --cube")
    return ComplexCube()


def reality_of(channel_gain: Path | None) -> Reality | None:
    """Channels with the gains of a file; None leaves it to the record.

    Raises
    ------
    InputError
        The file holds no two-dimensional table of finite numbers.
    """
    if channel_gain is None:
        return None
    try:
        gain = np.load(channel_gain, allow_pickle=False)
    except (OSError, ValueError, EOFError) as error:
        raise InputError(f"cannot be read ({error})", str(channel_gain)) from error
    if gain.ndim != 2 or not np.issubdtype(gain.dtype, np.number):
        raise InputError(f"shape {gain.shape}", str(channel_gain), "give rows x columns of numbers")
    dead = gain == 0
    channels = Channels.ideal(gain.shape).with_gain(np.where(dead, 1, gain)).without(dead)
    return Reality(channels)


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
