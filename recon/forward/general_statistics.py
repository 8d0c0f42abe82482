"""b = Aᴴ W y and ‖W^{1/2} y‖² of a record through the general operator, in one pass.

W holds the weights of shots and channels. What stands in a channel of weight zero is not looked
at: it may be NaN.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.general import GeneralOperator

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

Batches = Iterable[tuple[slice, ComplexArray]]


@dataclass(frozen=True, eq=False)
class GeneralStatistics:
    """What a record says through the general operator.

    Attributes
    ----------
    linear
        b = Aᴴ W y, (components, nz, ny, nx).
    energy
        ‖W^{1/2} y‖², dimensionless.
    samples
        Number of complex samples with weight above zero.
    """

    linear: ComplexArray
    energy: float
    samples: int


def gather(
    operator: GeneralOperator, batches: Batches, progress: Callable[[int], None] | None = None
) -> GeneralStatistics:
    """Read a record once.

    Parameters
    ----------
    batches
        Pairs (shots, samples (n, times, channels y, channels x)), each shot once.
    progress
        Called with the number of shots done so far.

    Raises
    ------
    InputError
        A batch has the wrong shape, or a channel that carries weight a NaN or infinite sample.
    """
    model = operator.model
    energy = 0.0
    weight = model.channels.weight.astype(np.float32)

    def shots() -> Iterator[tuple[int, ComplexArray]]:
        nonlocal energy
        for shot, samples in each_shot(operator, batches, progress):
            weighted = samples * (weight * np.float32(model.weight[shot]))
            energy += float(np.vdot(samples, weighted).real)
            yield shot, weighted

    linear = operator.back_project(shots())
    return GeneralStatistics(linear, energy, model.sample_count)


def channel_residuals(operator: GeneralOperator, x: ComplexArray, batches: Batches) -> FloatArray:
    """Root mean square residual of every channel in units of its stated noise.

    About 1 where the model explains a channel; 0 for dead channels; (channels y, channels x).
    Batches must come in the order of the shots.
    """
    model = operator.model
    power = np.zeros(model.channels.shape)
    predicted = operator.shots(x)
    for shot, samples in each_shot(operator, batches):
        rest = samples - next(predicted)
        power += model.weight[shot] * (rest.real**2 + rest.imag**2).sum(axis=0)
    count = max(1, int(np.count_nonzero(model.weight))) * operator.sample_shape[1]
    return np.sqrt(power * model.channels.weight / count)


def each_shot(
    operator: GeneralOperator, batches: Batches, progress: Callable[[int], None] | None = None
) -> Iterator[tuple[int, ComplexArray]]:
    """Numbered shots (times, channels y, channels x), checked; dead channels are set to zero."""
    channels = operator.model.channels
    dead = channels.weight == 0
    done = 0
    for where, samples in batches:
        if samples.shape[1:] != operator.sample_shape[1:]:
            raise InputError(
                f"samples per shot have shape {samples.shape[1:]}, not {operator.sample_shape[1:]}",
                f"shots {where.start} to {where.stop - 1}",
            )
        for offset, one in enumerate(samples):
            clean = np.where(dead, 0, one) if dead.any() else one
            if not np.isfinite(clean).all():
                raise InputError(
                    "NaN or infinite sample",
                    f"shot {where.start + offset}",
                    "drop the shot or mask the channel",
                )
            yield where.start + offset, clean
            done += 1
        if progress is not None:
            progress(done)
