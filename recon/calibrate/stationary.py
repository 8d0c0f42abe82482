"""A stationary Gaussian prior for amounts that nobody knows, and its evidence.

Component c of the unknown has at lateral frequency κ' the covariance between planes

    Γ_c(κ') = v_c s(κ') R,   s ∝ (1 + (κ' ℓ)²/p)^(−p/2),   R_zz' = ρ^|z − z'|,

s of mean 1 over the lattice, its value at κ' = 0 raised by `MEAN` so that the mean amount is left
free. For the evidence v and ρ are numbers of their own for each component in every ring of |κ'|,
half an octave wide, so that no spectrum is forced upon the sample: v is maximised, and the evidence
is averaged over a few ρ; s then only says how the spectrum runs within a ring. With b = AᴴWy and
the blocks of G = AᴴWA the log evidence of complex Gaussian samples is

    −‖W^{1/2}y‖² + bᴴ (G + Γ⁻¹)⁻¹ b − log det(1 + Γ G),

up to what depends on the noise alone (no factor ½: σ² = E|n|²). The v are found one at a time,
from eigenvalues that they share.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.forward.statistics import Statistics
from recon.grid import Grid

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]

CORRELATIONS = (0.0, 0.5, 0.8, 0.95, 0.99, 0.999)
MEAN = 1e3
RINGS = 2
"""Rings of |κ'| per octave."""
NEWTON = 60
SETTLED = 1e-6
EMPTY = 1e-6
"""v λ below which a ring counts as empty."""
TINY = 1e-300


@dataclass(frozen=True)
class Shape:
    """What the spectrum looks like, apart from its size.

    Attributes
    ----------
    length
        ℓ, metres.
    power
        p: a power law κ^−p beyond √p/ℓ, a Gaussian if p is large.
    correlation
        ρ between neighbouring planes, between −1 and 1.
    """

    length: float
    power: float
    correlation: float

    def lateral(self, grid: Grid) -> FloatArray:
        """s in FFT order, (ny, nx)."""
        _, ny, nx = grid.shape
        wave_y = 2 * np.pi * np.fft.fftfreq(ny, grid.voxel[1])
        wave_x = 2 * np.pi * np.fft.fftfreq(nx, grid.voxel[2])
        square = (wave_y**2)[:, None] + wave_x**2
        spectrum = (1 + square * self.length**2 / self.power) ** (-self.power / 2)
        spectrum /= spectrum.mean()
        spectrum[0, 0] *= MEAN
        return spectrum

    def axial(self, planes: int) -> FloatArray:
        """R, (nz, nz)."""
        levels = np.arange(planes)
        return np.asarray(self.correlation ** np.abs(levels[:, None] - levels))

    def root(self, statistics: Statistics) -> FloatArray:
        """L with L Lᵀ = Γ/v in the blocks of G, (blocks, q, q)."""
        grid, layout = statistics.grid, statistics.layout
        planes = np.broadcast_to(np.sqrt(self.lateral(grid)), grid.shape)
        scale = layout.gather(np.ascontiguousarray(planes)[None])
        scale = scale.reshape(len(scale), -1).T
        factor = np.linalg.cholesky(self.axial(grid.shape[0]) + 1e-9 * np.eye(grid.shape[0]))
        whole = np.kron(np.eye(scale.shape[1] // grid.shape[0]), factor)
        return np.asarray((scale[:, :, None] * whole).real)


START = Shape(10e-6, 3.0, 0.5)


@dataclass(frozen=True, eq=False)
class Evidence:
    """Log evidence of statistics, the variances maximised and the correlations averaged over.

    Attributes
    ----------
    value
        The log evidence.
    explained
        bᴴ (G + Γ⁻¹)⁻¹ b.
    """

    value: float
    explained: float


def rings(statistics: Statistics) -> NDArray[np.intp]:
    """Ring of every block, (blocks,): 0 for κ' = 0, then `RINGS` to an octave of |κ'|.

    Where frequencies alias onto each other the lowest one counts.
    """
    grid, layout = statistics.grid, statistics.layout
    _, ny, nx = grid.shape
    wave_y, wave_x = (
        2 * np.pi * np.fft.fftfreq(n, edge)
        for n, edge in zip((ny, nx), grid.voxel[1:], strict=True)
    )
    size = np.hypot(wave_y[:, None], wave_x) / min(grid.lattice_step)
    whole = np.broadcast_to(size, (1, *grid.shape))
    lowest = layout.gather(np.ascontiguousarray(whole)).reshape(layout.block_size, -1).min(axis=0)
    octaves = np.log2(np.maximum(lowest, 0.5)) * RINGS
    return np.where(lowest < 0.5, 0, 1 + np.floor(octaves + 1e-9).astype(int))


def evidence(statistics: Statistics) -> Evidence:
    """Log evidence of the statistics of components with a Gram matrix of 1.

    Parameters
    ----------
    statistics
        Of an orthonormal time basis, so that components are uncoupled.
    """
    ring = rings(statistics)
    order = np.argsort(ring, kind="stable")
    first = np.flatnonzero(np.diff(ring[order], prepend=-1))
    gains, explained = np.array(
        [
            _of_correlation(statistics, replace(START, correlation=one), order, first)
            for one in CORRELATIONS
        ]
    ).transpose(1, 0, 2, 3)
    most = gains.max(axis=0)
    shares = np.exp(gains - most)
    value = (most + np.log(shares.mean(axis=0))).sum()
    part = (explained * shares).sum(axis=0) / shares.sum(axis=0)
    return Evidence(float(value) - statistics.energy, float(part.sum()))


def _of_correlation(
    statistics: Statistics, shape: Shape, order: IntArray, first: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Gain in log evidence over no signal, and what is explained, (components, rings) each.

    Blocks taken in `order` are sorted by ring; `first` is where each ring begins.
    """
    values, vectors, root = spectrum(statistics, shape)
    blocks, q = values.shape
    count = len(statistics.linear)
    b = statistics.layout.gather(statistics.linear).reshape(count, q, blocks).transpose(2, 1, 0)
    inner = vectors.conj().transpose(0, 2, 1) @ (root.transpose(0, 2, 1) @ b.astype(complex))
    power = np.abs(inner.transpose(2, 0, 1)[:, order]) ** 2 / np.prod(statistics.grid.shape[1:])
    values = values[order]

    def total(terms: FloatArray) -> FloatArray:
        return np.add.reduceat(terms.sum(axis=2), first, axis=1)

    members = np.diff(first, append=blocks)
    size = _best_variance(values, power, total, members)
    spread = np.repeat(size, members, axis=1)[:, :, None]
    part = total(power * spread / (1 + spread * values))
    return part - total(np.log1p(spread * values)), part


def spectrum(statistics: Statistics, shape: Shape) -> tuple[FloatArray, ComplexArray, FloatArray]:
    """Eigenvalues and eigenvectors of Lᴴ G L per block, and L, for unit variance."""
    root = shape.root(statistics)
    q = root.shape[1]
    normal = statistics.normal.reshape(q, q, -1).transpose(2, 0, 1).astype(complex)
    values, vectors = np.linalg.eigh(root.transpose(0, 2, 1) @ normal @ root)
    return np.maximum(values, 0), vectors, root


def _best_variance(
    values: FloatArray,
    power: FloatArray,
    total: Callable[[FloatArray], FloatArray],
    members: IntArray,
) -> FloatArray:
    """v that maximises Σ power v/(1 + vλ) − log(1 + vλ) in each ring, (components, rings).

    Newton's method in log v. E power = λ(1 + vλ) gives the first guess.

    Parameters
    ----------
    values, power
        λ (blocks, q) and (components, blocks, q).
    total
        Sum over every ring, (components, blocks, q) to (components, rings).
    members
        Blocks of each ring, (rings,).
    """
    square = np.maximum(total(values[None] ** 2), TINY)
    scale = np.maximum(total(values[None]) / square, TINY)
    place = np.log(np.maximum(total(power - values) / square, 1e-3 * scale))
    lowest = np.log(EMPTY * scale)
    for _ in range(NEWTON):
        size = np.repeat(np.exp(place), members, axis=1)[:, :, None]
        damp = 1 / (1 + size * values)
        signal, shrunk = power * size * damp**2, size * values * damp
        slope = total(signal - shrunk)
        curve = total(signal * (2 * damp - 1) - shrunk * damp)
        change = np.where(curve < 0, -slope / np.minimum(curve, -TINY), np.sign(slope))
        change = np.clip(change, -2, 2)
        change[place < lowest] = 0
        place += change
        if np.abs(change).max() < SETTLED:
            break
    return np.exp(place)
