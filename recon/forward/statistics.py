"""What a record has to say about the object, in one pass and bounded memory.

For Gaussian noise the record enters the estimate only through

    b = Aᴴ W y,   G = Aᴴ W A,   ‖W^{1/2} y‖²,   the number of samples,

and all four add over shots. Statistics of separate shots can therefore be added as shots
arrive, or summed over workers.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.layout import Layout
from recon.forward.model import ForwardModel
from recon.forward.normal import normal_blocks
from recon.forward.operator import ForwardOperator
from recon.grid import Grid

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Statistics:
    """Sufficient statistics of one or more shots.

    Attributes
    ----------
    linear
        FFT of b over the lateral axes, (components, nz, ny, nx).
    normal
        Blocks of G for a single component of unit time course, one block per coset of object
        frequencies: (q, q, blocks y, blocks x) in the order of `layout`.
    gram
        Spectral Gram matrix Φᴴ Φ, (components, components).
    energy
        ‖W^{1/2} y‖², dimensionless.
    samples
        Number of complex samples.
    """

    grid: Grid
    layout: Layout
    linear: ComplexArray
    normal: ComplexArray
    gram: ComplexArray
    energy: float
    samples: int

    def __add__(self, other: Statistics) -> Statistics:
        """Statistics of both sets of shots together."""
        same = self.grid == other.grid and self.layout == other.layout
        if not same or not np.allclose(self.gram, other.gram):
            raise InputError(
                "statistics of different grids or sample times cannot be added", "record"
            )
        return Statistics(
            self.grid,
            self.layout,
            self.linear + other.linear,
            self.normal + other.normal,
            self.gram,
            self.energy + other.energy,
            self.samples + other.samples,
        )

    def scaled(self, unit: FloatArray) -> Statistics:
        """Statistics for unknowns counted in units of size `unit`, (components,)."""
        factor = np.asarray(unit, float)
        linear = self.linear * factor[:, None, None, None].astype(np.float32)
        return replace(self, linear=linear, gram=self.gram * np.outer(factor, factor))

    def projected(self, vectors: ComplexArray) -> Statistics:
        """Statistics for unknowns x = V u with orthonormal columns V (components, fewer).

        The energy stays that of the whole record.
        """
        linear = np.tensordot(vectors.conj().T.astype(np.complex64), self.linear, 1)
        return replace(self, linear=linear, gram=vectors.conj().T @ self.gram @ vectors)

    def sensitivity(self) -> FloatArray:
        """Square root of the mean diagonal of G per component: signal-to-noise of one unit."""
        return np.sqrt(np.diag(self.spectral_gram()).real)

    def spectral_gram(self) -> ComplexArray:
        """G between components, mean over voxels, (components, components)."""
        q = len(self.normal)
        mean = float(np.einsum("aayx->", self.normal).real) / (q * np.prod(self.layout.blocks))
        return np.asarray(self.gram * mean)


def accumulate(
    model: ForwardModel,
    batches: Iterable[tuple[slice, ComplexArray]],
    progress: Callable[[int], None] | None = None,
) -> Statistics:
    """Read a record once.

    Parameters
    ----------
    batches
        Pairs (shots, samples (n, times, channels y, channels x)), in any order, each shot once.
    progress
        Called with the number of shots done so far.

    Raises
    ------
    InputError
        A sample is NaN or infinite, or a batch has the wrong shape.
    """
    operator = ForwardOperator(model, np.complex64)
    weight = model.encoding.weight
    energy, done = 0.0, 0

    def checked() -> Iterator[tuple[slice, ComplexArray]]:
        nonlocal energy, done
        for shots, samples in batches:
            samples = np.ascontiguousarray(samples, np.complex64)
            if samples.shape[1:] != operator.sample_shape[1:]:
                raise InputError(
                    f"samples of a shot have shape {samples.shape[1:]}, "
                    f"not {operator.sample_shape[1:]}",
                    f"shots {shots.start} to {shots.stop - 1}",
                )
            energy += float(squared_norms(samples, shots.start) @ weight[shots])
            yield shots, samples
            done += len(samples)
            if progress is not None:
                progress(done)

    linear = operator.back_project(checked(), weight)
    layout, normal = normal_blocks(operator)
    gram = model.basis.conj().T @ model.basis
    return Statistics(model.grid, layout, linear, normal, gram, energy, model.sample_count)


def squared_norm(samples: ComplexArray, shot: int) -> float:
    """‖y‖² of one shot, refused if a sample is not finite."""
    return float(squared_norms(samples[None], shot)[0])


def squared_norms(samples: ComplexArray, first_shot: int) -> FloatArray:
    """‖y‖² of some shots, (shots,); a sample that is not finite is refused."""
    flat = samples.reshape(len(samples), -1).view(np.float32)
    squares = np.vecdot(flat, flat).astype(float)
    bad = np.flatnonzero(~np.isfinite(squares))
    if bad.size:
        shot = f"shot {first_shot + bad[0]}"
        raise InputError("NaN or infinite sample", shot, "drop or mend the shot")
    return squares
