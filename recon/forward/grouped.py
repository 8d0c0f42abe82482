"""Shots whose samples lie at different times: one group per set of times, one sum of blocks.

Within a group Φ is shared and AᴴWA = (Φ_gᴴ Φ_g) ⊗ G_g(κ'). Over groups the Kronecker products add
up, so components share a block of (components · nz)²; where all Gram matrices are diagonal (every
time point an unknown of its own) they stay apart. b and the energy simply add. The step stays
exact and direct.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.block_matrix import BlockMatrix
from recon.forward.blocks import BlockQuadratic
from recon.forward.diffusing import JointBlocks, JointStatistics
from recon.forward.layout import Layout
from recon.forward.model import ForwardModel
from recon.forward.normal import normal_blocks
from recon.forward.operator import ForwardOperator
from recon.forward.statistics import Statistics, squared_norm
from recon.grid import Grid

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]


@dataclass(frozen=True)
class GroupedStatistics:
    """As `Statistics`, with blocks and Gram matrix per group.

    Attributes
    ----------
    normals, grams
        One per group: (q, q, blocks y, blocks x), and (components, components).
    """

    grid: Grid
    layout: Layout
    linear: ComplexArray
    normals: tuple[ComplexArray, ...]
    grams: tuple[ComplexArray, ...]
    energy: float
    samples: int

    @property
    def gram(self) -> ComplexArray:
        """Sum of the groups' Gram matrices."""
        return np.sum(self.grams, axis=0)

    @property
    def normal(self) -> ComplexArray:
        """Blocks of the mean component, over the trace of `gram`."""
        weights = [np.trace(gram).real for gram in self.grams]
        total = sum(w * normal for w, normal in zip(weights, self.normals, strict=True))
        return np.asarray(total / sum(weights), np.complex64)

    def scaled(self, unit: FloatArray) -> GroupedStatistics:
        """Statistics for unknowns counted in units of size `unit`, (components,)."""
        factor = np.asarray(unit, float)
        linear = self.linear * factor[:, None, None, None].astype(np.float32)
        grams = tuple(gram * np.outer(factor, factor) for gram in self.grams)
        return replace(self, linear=linear, grams=grams)

    def projected(self, vectors: ComplexArray) -> GroupedStatistics:
        """Statistics for unknowns x = V u with orthonormal columns V (components, fewer)."""
        linear = np.tensordot(vectors.conj().T.astype(np.complex64), self.linear, 1)
        grams = tuple(vectors.conj().T @ gram @ vectors for gram in self.grams)
        return replace(self, linear=linear, grams=grams)

    def sensitivity(self) -> FloatArray:
        """Square root of the mean diagonal of G per component: signal-to-noise of one unit."""
        return np.sqrt(np.diag(self.spectral_gram()).real)

    def spectral_gram(self) -> ComplexArray:
        """G between components, mean over voxels, (components, components)."""
        total = np.zeros_like(self.grams[0])
        for gram, normal in zip(self.grams, self.normals, strict=True):
            share = float(np.einsum("aayx->", normal).real)
            total = total + gram * (share / (len(normal) * float(np.prod(self.layout.blocks))))
        return np.asarray(total)


class GroupedBlocks(BlockQuadratic):
    """The exact data term of grouped statistics."""

    statistics: GroupedStatistics  # type: ignore[assignment]

    def __init__(self, statistics: GroupedStatistics, real: bool = False) -> None:
        super().__init__(statistics, real)  # type: ignore[arg-type]

    def scaled(self, unit: FloatArray) -> GroupedBlocks:
        """The data term for unknowns counted in units of size `unit`, (components,)."""
        return GroupedBlocks(self.statistics.scaled(unit), self.real)

    def _assemble(self) -> tuple[ComplexArray | None, BlockMatrix]:
        grams = [gram.astype(np.complex64) for gram in self.statistics.grams]
        normals = self.statistics.normals
        if all(np.count_nonzero(gram - np.diag(np.diag(gram))) == 0 for gram in grams):
            return None, self._apart([np.diag(gram).real for gram in grams], normals)
        total: ComplexArray | float = 0.0
        for gram, normal in zip(grams, normals, strict=True):
            if self.real:
                total = total + self._symmetric_kronecker(gram, normal)
            else:
                size = len(gram) * len(normal)
                joint = gram[:, None, :, None, None, None] * normal[None, :, None]
                total = total + joint.reshape(size, size, *normal.shape[2:])
        return None, self._matrix(np.asarray(total)[None], 1)

    def _apart(self, weights: list[FloatArray], normals: tuple[ComplexArray, ...]) -> BlockMatrix:
        """One matrix per component."""
        total = np.zeros((len(weights[0]), *normals[0].shape), np.complex64)
        for weight, normal in zip(weights, normals, strict=True):
            if self.real:
                normal = 0.5 * (normal + self.layout.mirrored(normal).conj())
            for component in np.flatnonzero(weight):
                total[component] += np.float32(weight[component]) * normal
        return self._matrix(total, 1)


def data_term(
    statistics: Statistics | GroupedStatistics | JointStatistics, real: bool
) -> BlockQuadratic:
    """The data term that fits the statistics."""
    if isinstance(statistics, JointStatistics):
        return JointBlocks(statistics, real)
    if isinstance(statistics, GroupedStatistics):
        return GroupedBlocks(statistics, real)
    return BlockQuadratic(statistics, real)


def accumulate_grouped(
    models: list[ForwardModel],
    group: IntArray,
    batches: Iterable[tuple[slice, ComplexArray]],
    progress: Callable[[int], None] | None = None,
) -> GroupedStatistics:
    """Read a record once.

    Parameters
    ----------
    models
        One per group, each with all shots of the record and the group's own basis.
    group
        Which group each shot belongs to, (shots,).

    Raises
    ------
    InputError
        A sample is NaN or infinite, or a batch has the wrong shape.
    """
    linear: ComplexArray | float = 0.0
    energy, done = 0.0, 0
    weight = models[0].encoding.weight
    for shots, samples in batches:
        numbers = np.arange(shots.start, shots.stop)
        for number, one in zip(numbers, samples, strict=True):
            energy += (
                squared_norm(np.ascontiguousarray(one, np.complex64), int(number)) * weight[number]
            )
        for place, model in enumerate(models):
            rows = np.flatnonzero(group[numbers] == place)
            if rows.size:
                operator = ForwardOperator(model.subset(numbers[rows]))
                if samples.shape[1:] != operator.sample_shape[1:]:
                    raise InputError(f"samples of a shot have shape {samples.shape[1:]}", "record")
                part = [(slice(0, len(rows)), samples[rows])]
                linear = linear + operator.back_project(part, weight[numbers[rows]])
        done += len(samples)
        if progress is not None:
            progress(done)
    normals, grams, layout = [], [], None
    for place, model in enumerate(models):
        layout, normal = normal_blocks(
            ForwardOperator(model.subset(np.flatnonzero(group == place)))
        )
        normals.append(normal)
        grams.append(model.basis.conj().T @ model.basis)
    assert layout is not None
    return GroupedStatistics(
        models[0].grid,
        layout,
        np.asarray(linear),
        tuple(normals),
        tuple(grams),
        energy,
        models[0].sample_count,
    )
