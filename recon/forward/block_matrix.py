"""Many small matrices, one per block of object frequencies, applied at once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

# Up to this many multiply-adds per block the vectorised sum over columns beats batched products.
FEW = 100


class BlockMatrix:
    """Square matrices for every block, applied to a batch of vectors.

    Parameters
    ----------
    entries
        (groups, q, q, blocks): one matrix per group and block.
    batch
        How many vectors share a group's matrix.
    """

    def __init__(self, entries: ComplexArray, batch: int) -> None:
        self.groups, self.size, _, self.blocks = entries.shape
        self.batch = batch
        self._columnwise = self.size**2 * batch <= FEW
        if self._columnwise:
            self._entries = np.ascontiguousarray(entries)
        else:
            self._entries = np.ascontiguousarray(entries.transpose(0, 3, 1, 2))

    @property
    def entries(self) -> ComplexArray:
        """(groups, q, q, blocks)."""
        return self._entries if self._columnwise else self._entries.transpose(0, 2, 3, 1)

    @property
    def per_block(self) -> ComplexArray:
        """(groups, blocks, q, q)."""
        return self._entries.transpose(0, 3, 1, 2) if self._columnwise else self._entries

    def multiply(self, vectors: ComplexArray) -> ComplexArray:
        """Matrix times vectors (groups, batch, q, blocks)."""
        if not self._columnwise:
            product = np.matmul(self._entries, vectors.transpose(0, 3, 2, 1))
            return product.transpose(0, 3, 2, 1)
        entries = self._entries[:, None]
        product = entries[:, :, :, 0] * vectors[:, :, None, 0]
        work = np.empty_like(product)
        for column in range(1, self.size):
            np.multiply(entries[:, :, :, column], vectors[:, :, None, column], out=work)
            product += work
        return product

    def inverse(self) -> BlockMatrix:
        """The inverse of every matrix; they are Hermitian and positive definite."""
        if self._columnwise:
            return BlockMatrix(_gauss_jordan(self._entries), self.batch)
        return BlockMatrix(np.linalg.inv(self.per_block).transpose(0, 2, 3, 1), self.batch)

    def factor(self) -> BlockMatrix:
        """Lower Cholesky factors L with L Lᴴ the matrix."""
        return BlockMatrix(np.linalg.cholesky(self.per_block).transpose(0, 2, 3, 1), self.batch)

    def shifted(
        self, diagonal: FloatArray | float, coupling: FloatArray | None = None
    ) -> BlockMatrix:
        """Add a diagonal (q, blocks) or scalar and matrices (q, q) or (q, q, blocks)."""
        entries = self.entries.copy()
        index = np.arange(self.size)
        entries[:, index, index] += np.asarray(diagonal, entries.real.dtype)
        if coupling is not None:
            coupling = coupling.reshape(self.size, self.size, -1)
            entries += coupling.astype(entries.real.dtype)
        return BlockMatrix(entries, self.batch)

    def eigen(self) -> tuple[FloatArray, ComplexArray]:
        """Eigenvalues (groups, blocks, q) ascending and eigenvectors (groups, blocks, q, q)."""
        values, vectors = np.linalg.eigh(self.per_block)
        return values, vectors


def _gauss_jordan(entries: ComplexArray) -> ComplexArray:
    """Inverses of small positive definite matrices (groups, q, q, blocks), all blocks at once.

    Without pivoting, which such matrices do not need; several times faster than one call of a
    solver per block.
    """
    inverse = entries.copy()
    work = np.empty_like(inverse)
    for pivot in range(entries.shape[1]):
        scale = 1 / inverse[:, pivot, pivot].real
        row = inverse[:, pivot] * scale[:, None]
        column = inverse[:, :, pivot].copy()
        np.multiply(column[:, :, None], row[:, None], out=work)
        inverse -= work
        inverse[:, pivot] = row
        inverse[:, :, pivot] = column * -scale[:, None]
        inverse[:, pivot, pivot] = scale
    return inverse
