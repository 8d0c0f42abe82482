"""The quadratic data term, exact and cheap, in the object's lateral frequencies.

    q(x) = ½ ‖W^{1/2}(y − A x)‖² = ½ xᴴ G x − Re bᴴ x + ½ ‖W^{1/2} y‖²

G is block-diagonal over lateral frequency (see `recon.forward.layout`). Spectral components are
uncoupled by the eigenvectors of the spectral Gram matrix when that is exact; for a real unknown
whose Gram matrix is not real they share a block instead.

The penalty's own normal operator DᴴD fits the same blocks when it is a sum of a function of the
lateral frequency and a matrix along z; `Symbol` holds it. Then (G + ρ DᴴD)⁻¹ is one batched
small solve: the exact quadratic step.
"""

from __future__ import annotations

from collections.abc import Callable
from copy import copy
from functools import cached_property
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.forward.block_matrix import BlockMatrix
from recon.forward.statistics import Statistics
from recon.symbol import Symbol

Array = NDArray[np.inexact]
ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


class BlockQuadratic:
    """The data term of a record's statistics, for a complex or a real unknown.

    Parameters
    ----------
    statistics
        From `recon.forward.statistics.accumulate`.
    real
        The unknown is real (amounts) rather than complex (a cube of magnetisation).
    """

    def __init__(self, statistics: Statistics, real: bool = False) -> None:
        self.statistics = statistics
        self.real = real
        self.layout = statistics.layout
        components = len(statistics.gram)
        self.shape = (components, *statistics.grid.shape)
        self.dtype = np.dtype(np.float32 if real else np.complex64)
        self._half = real and self.layout.aliases == (1, 1)
        self._columns = self.shape[-1] // 2 + 1 if self._half else self.shape[-1]
        self._mix, self.matrix = self._assemble()
        self._block_shape = (self.layout.blocks[0], self.matrix.blocks // self.layout.blocks[0])

    @cached_property
    def linear(self) -> Array:
        """b = Aᴴ W y, (components, nz, ny, nx); its real part for a real unknown."""
        b = scipy.fft.ifft2(self.statistics.linear)
        return np.ascontiguousarray(b.real) if self.real else b

    def with_linear(self, b: Array) -> BlockQuadratic:
        """The same blocks with another b (the energy stays that of the record)."""
        other = copy(self)
        other.__dict__["linear"] = b
        return other

    @property
    def energy(self) -> float:
        """‖W^{1/2} y‖²."""
        return self.statistics.energy

    def value(self, x: Array) -> float:
        """q(x)."""
        quadratic = float(np.vdot(x, self.normal(x)).real)
        return 0.5 * quadratic - float(np.vdot(self.linear, x).real) + 0.5 * self.energy

    def misfit(self, x: Array) -> float:
        """Mean squared residual in units of the noise variance: 1 when x explains the record."""
        return 2 * self.value(x) / self.statistics.samples

    def normal(self, x: Array) -> Array:
        """G x."""
        return self.filtered(self.matrix, x)

    def gradient(self, x: Array) -> Array:
        """G x − b."""
        return self.normal(x) - self.linear

    def step(self, symbol: Symbol) -> Callable[..., Array]:
        """The map r ↦ (G + symbol)⁻¹ r; a start, which inexact data terms use, is ignored."""
        inverse = self.matrix.shifted(*self._spread(symbol)).inverse()
        return lambda right, start=None: self.filtered(inverse, right)

    def scaled(self, unit: FloatArray) -> BlockQuadratic:
        """The data term for unknowns counted in units of size `unit`, (components,)."""
        return BlockQuadratic(self.statistics.scaled(unit), self.real)

    @cached_property
    def _root(self) -> BlockMatrix:
        """L with L Lᴴ = G: Cholesky factors, jittered at the rounding level, or eigenvectors."""
        jitter = 1e-6 * float(np.einsum("gaab->", self.matrix.entries).real)
        jitter /= self.matrix.groups * self.matrix.size * self.matrix.blocks
        try:
            return self.matrix.shifted(max(jitter, 1e-30)).factor()
        except np.linalg.LinAlgError:  # too few shots for every block to have full rank
            values, vectors = self.spectrum
            roots = vectors * np.sqrt(np.maximum(values, 0))[:, :, None]
            return BlockMatrix(roots.transpose(0, 2, 3, 1), self.matrix.batch)

    def noise(self, random: np.random.Generator) -> Array:
        """A draw of Aᴴ W n, the noise of b for a record's noise n of the stated variance.

        Its covariance is G for a complex unknown and ½ G for a real one.
        """
        white = random.standard_normal(self.shape, np.float32)
        if self.real:
            return self.filtered(self._root, white * np.float32(np.sqrt(0.5)))
        imaginary = random.standard_normal(self.shape, np.float32)
        white = ((white + 1j * imaginary) * np.float32(np.sqrt(0.5))).astype(np.complex64)
        return self.filtered(self._root, white)

    @cached_property
    def spectrum(self) -> tuple[FloatArray, ComplexArray]:
        """Eigenvalues (groups, blocks, q) and eigenvectors of the blocks of G."""
        return self.matrix.eigen()

    @property
    def largest(self) -> float:
        """Largest eigenvalue of G: the Lipschitz constant of the gradient."""
        return float(self.spectrum[0].max())

    def diagonal(self) -> FloatArray:
        """Mean over the lateral axes of G's diagonal, (components, nz)."""
        per_depth = np.einsum("aa...->a...", self.statistics.normal).real
        share = per_depth.reshape(-1, self.shape[1], *self.layout.blocks).mean(axis=(0, 2, 3))
        return np.outer(np.diag(self.statistics.gram).real, share)

    def filtered(self, matrix: BlockMatrix, x: Array) -> Array:
        """Apply blocks to an object: FFT, small products, inverse FFT."""
        return self.from_blocks(matrix.multiply(self.to_blocks(x)))

    def to_blocks(self, x: Array) -> ComplexArray:
        """Object (components, nz, ny, nx) to block vectors (groups, batch, q, blocks)."""
        spectrum = scipy.fft.rfft2(x) if self._half else scipy.fft.fft2(x)
        if self._mix is not None:
            spectrum = np.tensordot(self._mix.conj().T, spectrum, axes=1)
        gathered = self.layout.gather(spectrum)
        return gathered.reshape(self.matrix.groups, self.matrix.batch, self.matrix.size, -1)

    def from_blocks(self, vectors: ComplexArray) -> Array:
        """The inverse of `to_blocks`."""
        shape = (-1, *self._block_shape)
        spectrum = self.layout.scatter(np.ascontiguousarray(vectors).reshape(shape))
        if self._mix is not None:
            spectrum = np.tensordot(self._mix, spectrum, axes=1)
        if self._half:
            return scipy.fft.irfft2(spectrum, s=self.shape[-2:], overwrite_x=True)
        x = scipy.fft.ifft2(spectrum, overwrite_x=True)
        return np.ascontiguousarray(x.real) if self.real else x

    def half_weights(self) -> FloatArray:
        """How many lattice frequencies each block stands for, (blocks,): 1 or 2."""
        rows, columns = self._block_shape
        weights = np.ones((rows, columns))
        if self._half:
            weights[:, 1 : (self.shape[-1] + 1) // 2] = 2
        return weights.ravel()

    def plane_mean(self, per_block: ComplexArray) -> FloatArray:
        """Mean over each plane of the diagonal of a block operator, (components, nz).

        Takes matrices (groups, blocks, q, q), such as a covariance.
        """
        return self.plane_mean_of_diagonal(np.einsum("gkqq->gkq", per_block).real)

    def plane_mean_of_diagonal(self, per_block: FloatArray) -> FloatArray:
        """The same from diagonals (groups, blocks, q)."""
        weights = self.half_weights()
        diagonal = np.einsum("gkq,k->gq", per_block, weights / weights.sum())
        aliases = int(np.prod(self.layout.aliases))
        mean = diagonal.reshape(len(diagonal), -1, aliases, self.shape[1]).mean(axis=2)
        if self._mix is not None:
            return np.abs(self._mix) ** 2 @ mean[:, 0]
        return np.broadcast_to(mean[0], self.shape[:2])

    def spread_plane(self, plane: FloatArray) -> FloatArray:
        """A function of lateral frequency (ny, nx), FFT order, as block diagonals (q, blocks)."""
        return np.asarray(self._spread(Symbol(plane))[0])

    def _assemble(self) -> tuple[ComplexArray | None, BlockMatrix]:
        """Choose how components are uncoupled; return the mixing matrix and the blocks."""
        normal: Any = self.statistics.normal
        gram: Any = self.statistics.gram.astype(np.complex64)
        if not self.real and np.allclose(gram, gram[0, 0].real * np.eye(len(gram))):
            return None, self._matrix((gram[0, 0].real * normal)[None], len(gram))
        if self.real and len(gram) > 1 and np.abs(gram.imag).max() > 1e-6 * np.abs(gram).max():
            return None, self._matrix(self._symmetric_kronecker(gram, normal)[None], 1)
        if self.real:
            normal = 0.5 * (normal + self.layout.mirrored(normal).conj())
            gram = gram.real
        values, vectors = np.linalg.eigh(gram)
        mixed = self._matrix(values[:, None, None, None, None] * normal, 1)
        return (None if len(gram) == 1 else vectors), mixed

    def _symmetric_kronecker(self, gram: ComplexArray, normal: ComplexArray) -> ComplexArray:
        """½ (Γ ⊗ G(κ') + conj(Γ ⊗ G(−κ'))): the blocks seen by a real unknown."""
        size = len(gram) * len(normal)
        mirrored = self.layout.mirrored(normal).conj()
        expand = (slice(None), None, slice(None), None)
        joint = 0.5 * (
            gram[expand][..., None, None] * normal[None, :, None]
            + gram.conj()[expand][..., None, None] * mirrored[None, :, None]
        )
        return joint.reshape(size, size, *normal.shape[2:])

    def _matrix(self, entries: ComplexArray, batch: int) -> BlockMatrix:
        """Keep the half plane where the other half follows by symmetry."""
        entries = entries[..., : self._columns] if self._half else entries
        return BlockMatrix(entries.reshape(*entries.shape[:3], -1), batch)

    def _spread(self, symbol: Symbol) -> tuple[FloatArray | float, FloatArray | None]:
        """A symbol in block order: diagonal (q, blocks) or scalar, coupling (q, q[, blocks])."""
        coupling = None if symbol.axial is None else self._coupling(symbol.axial)
        if isinstance(symbol.lateral, float | int):
            return symbol.lateral, coupling
        whole = np.broadcast_to(np.asarray(symbol.lateral), self.shape[1:])
        tall: Any = whole[..., : self._columns]
        one: Any = self.layout.gather(tall[None])
        diagonal: FloatArray = np.tile(one.reshape(len(one), -1), (self.matrix.size // len(one), 1))
        return diagonal, coupling

    def _coupling(self, axial: FloatArray) -> FloatArray:
        """Matrices along z in block order, the same for every component."""
        nz, size = self.shape[1], self.matrix.size
        if axial.ndim == 2:
            return np.kron(np.eye(size // nz), axial)
        planes: Any = axial[..., : self._columns]
        aliases = int(np.prod(self.layout.aliases))
        gathered = self.layout.gather(planes).reshape(nz, aliases, nz, -1)
        joint = np.zeros((size // nz // aliases, aliases, nz) * 2 + gathered.shape[-1:])
        for component in range(len(joint)):
            for alias in range(aliases):
                joint[component, alias, :, component, alias] = gathered[:, alias]
        return joint.reshape(size, size, -1)
