"""Which object frequencies share a block.

With one channel per voxel each object frequency is a block of its own, of size nz. When a camera
pixel spans b voxels, frequencies that differ by whole numbers of pixel-lattice periods alias onto
each other; those cosets are the blocks, of size b_y · b_x · nz.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

ComplexArray = NDArray[np.complexfloating]


@dataclass(frozen=True)
class Layout:
    """Rearranges spectra (components, nz, ny, nx) into blocks (q, blocks y, blocks x).

    Within a block the order is (component, alias y, alias x, z).
    """

    shape: tuple[int, int, int]
    aliases: tuple[int, int]

    @classmethod
    def of(cls, shape: tuple[int, int, int], binning: tuple[int, int]) -> Layout:
        return cls(shape, binning)

    @property
    def blocks(self) -> tuple[int, int]:
        """Number of blocks along (y, x)."""
        _, ny, nx = self.shape
        return ny // self.aliases[0], nx // self.aliases[1]

    @property
    def block_size(self) -> int:
        """Unknowns per block and component."""
        return self.shape[0] * self.aliases[0] * self.aliases[1]

    def gather(self, spectrum: ComplexArray) -> ComplexArray:
        """(components, nz, ny, nx) to (components · block_size, blocks y, blocks x)."""
        if self.aliases == (1, 1):
            return spectrum.reshape(-1, *spectrum.shape[-2:])
        (a, b), (my, mx) = self.aliases, self.blocks
        split = spectrum.reshape(-1, self.shape[0], a, my, b, mx)
        return split.transpose(0, 2, 4, 1, 3, 5).reshape(-1, my, mx)

    def scatter(self, blocks: ComplexArray) -> ComplexArray:
        """The inverse of `gather`."""
        nz = self.shape[0]
        if self.aliases == (1, 1):
            return blocks.reshape(-1, nz, *blocks.shape[-2:])
        (a, b), (my, mx) = self.aliases, self.blocks
        split = blocks.reshape(-1, a, b, nz, my, mx).transpose(0, 3, 1, 4, 2, 5)
        return split.reshape(-1, *self.shape)

    def mirrored(self, matrix: ComplexArray) -> ComplexArray:
        """The matrix blocks (q, q, blocks y, blocks x) of the opposite frequencies −κ'."""
        if self.aliases == (1, 1):
            rows, columns = (-np.arange(n) % n for n in self.shape[1:])
            return matrix[:, :, rows[:, None], columns]
        a, b = self.aliases
        my, mx = self.blocks
        nz = self.shape[0]
        size = matrix.shape[0] // (a * b * nz)
        index = np.arange(matrix.shape[0] * my * mx).reshape(size, a, b, nz, my, mx)
        full = index.transpose(0, 3, 1, 4, 2, 5).reshape(size, nz, a * my, b * mx)
        flipped = full[..., (-np.arange(a * my) % (a * my))[:, None], -np.arange(b * mx) % (b * mx)]
        split = flipped.reshape(size, nz, a, my, b, mx).transpose(0, 2, 4, 1, 3, 5)
        entry, place = np.divmod(split.reshape(-1, my * mx), my * mx)
        flat = matrix.reshape(*matrix.shape[:2], my * mx)
        mirrored = flat[entry[:, None, :], entry[None, :, :], place[:, None, :]]
        return mirrored.reshape(matrix.shape)
