"""What would close a shortfall, each remedy with its figure."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from recon.planning.limits import excitations_of
from recon.protocol import SpectralAxis

if TYPE_CHECKING:
    from recon.planning.feasibility import Feasibility

MOST_GAIN = 1e4


def mends(plan: Feasibility) -> Iterator[str]:
    """Lines of text for the species and plane that fall shortest; none if nothing does."""
    short = plan.shortfall()
    worst = float(short.max())
    if worst <= 1:
        return
    species, depth = (int(i) for i in np.unravel_index(int(short.argmax()), short.shape))
    name = plan.experiment.species[species].name
    height = plan.experiment.grid.heights[depth] * 1e6
    yield f"for {name} at {height:.3g} µm, short by a factor of {worst:.3g}:"
    gain = needed_gain(plan, species, depth)
    if gain is None:
        yield (
            f"  no gain up to {MOST_GAIN:g} closes it: these shots do not tell it apart; take more "
            "or other ones"
        )
    else:
        yield f"  {gain:.3g} times the polarisation{_polarisation(plan, species, gain)}"
        yield f"  or {gain**2:.3g} times the averages: {duration(plan.seconds() * gain**2)}"
    for factor in (2, 4):
        less = block_gain(plan, species, depth, factor)
        yield f"  or reading {factor} x {factor} voxels as one: error divided by {less:.3g}"
    nearer = worst / float(_nearer(plan, 0.5).shortfall()[species, depth])
    if nearer > 1.02:
        yield (
            "  or half the depth and thickness of the layer, at the same photons: error divided "
            f"by {nearer:.3g}"
        )
    yield from _other_axis(plan, species, depth)


def needed_gain(plan: Feasibility, species: int, depth: int) -> float | None:
    """Least factor of signal-to-noise at which the amount is detected, by bisection."""
    amount = plan.amounts_mM[species]

    def enough(gain: float) -> bool:
        return bool(plan.bound.detection_limit(gain)[species, depth] <= amount)

    low, high = 1.0, MOST_GAIN
    if not enough(high):
        return None
    for _ in range(10):
        middle = float(np.sqrt(low * high))
        low, high = (low, middle) if enough(middle) else (middle, high)
    return high


def block_gain(plan: Feasibility, species: int, depth: int, factor: int) -> float:
    """Error of a voxel over the error of the mean of factor x factor voxels."""
    bound = plan.bound
    _, ny, nx = plan.experiment.grid.shape
    kernel = np.zeros((ny, nx))
    kernel[:factor, :factor] = 1 / factor**2
    transfer = np.abs(np.fft.fft2(kernel)) ** 2
    diagonal = np.einsum("gkqq->gkq", bound._posterior).real
    block = bound.quadratic.plane_mean_of_diagonal(
        diagonal * bound.quadratic.spread_plane(transfer).T
    )
    whole = bound.quadratic.plane_mean_of_diagonal(diagonal)
    return float(np.sqrt(whole[species, depth] / block[species, depth]))


def _polarisation(plan: Feasibility, species: int, gain: float) -> str:
    """What there is now, and whether so much more can be had."""
    share = plan.experiment.species[species].polarisation
    if share is None:
        return " (now thermal)"
    now = f" (now {share:.2g})"
    return now if gain * share <= 1 else f"{now}, more than there is"


def _nearer(plan: Feasibility, share: float) -> Feasibility:
    """The plan with a shallower and thinner layer."""
    instrument = plan.experiment.instrument
    old = instrument.sensor_layer
    layer = old.model_copy(
        update={"depth_um": old.depth_um * share, "thickness_um": old.thickness_um * share}
    )
    changed = instrument.model_copy(update={"sensor_layer": layer})
    return replace(plan, experiment=replace(plan.experiment, instrument=changed))


def _other_axis(plan: Feasibility, species: int, depth: int) -> Iterator[str]:
    """The same table with its spectral axis sampled the other way."""
    protocol = plan.protocol
    times, now = len(protocol.sample_times), plan.shortfall()[species, depth]
    if times == 1:
        return
    if protocol.spectral_axis is SpectralAxis.LISTEN_AFTER_ENCODING:
        other = replace(protocol, spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE)
        changed = replace(plan, protocol=other)
        less = now / float(changed.shortfall()[species, depth])
        yield (
            f"  or evolving first and encoding then: error divided by {less:.3g}, in "
            f"{excitations_of(other)} times the time"
        )
        return
    averaged = replace(
        protocol,
        averages=protocol.averages * times,
        spectral_axis=SpectralAxis.LISTEN_AFTER_ENCODING,
    )
    less = now / float(replace(plan, protocol=averaged).shortfall()[species, depth])
    if less > 1.02:
        yield f"  or listening after encoding, in the same time: error divided by {less:.3g}"


def duration(seconds: float) -> str:
    """In a unit a person would use."""
    for unit, size in (("years", 3.156e7), ("days", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= 2 * size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds:.3g} s"
