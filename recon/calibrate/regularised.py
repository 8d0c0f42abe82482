"""(G + Γ⁻¹)⁻¹ for wavevectors off the lattice, by preconditioned conjugate gradients.

In whitened unknowns x = L w, Γ = L Lᴴ, the system is 1 + LᴴGL; the blocks that it nearly
has precondition it. Source: Hestenes & Stiefel, J. Res. NBS 49:409 (1952).
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.calibrate.stationary import Shape, spectrum
from recon.forward.general import GeneralOperator
from recon.forward.statistics import Statistics

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

MOST_ITERATIONS = 60


class Regularised:
    """The unknown's posterior mean and covariance at one geometry.

    Parameters
    ----------
    statistics
        Blocks that G nearly has, and their layout (`recon.calibrate.shifted`).
    shape, variance
        The prior; a variance for each component, (components,).
    """

    def __init__(self, statistics: Statistics, shape: Shape, variance: FloatArray) -> None:
        self._layout, self._shape = statistics.layout, statistics.grid.shape
        values, vectors, root = spectrum(statistics, shape)
        self._root = root.astype(np.float32)
        self._values = values.astype(np.float32)
        self._vectors = vectors.astype(np.complex64)
        self._size = np.sqrt(variance).astype(np.float32)

    def solve(
        self,
        operator: GeneralOperator,
        right: ComplexArray,
        tolerance: float,
        start: ComplexArray | None = None,
    ) -> tuple[ComplexArray, ComplexArray]:
        """x = (G + Γ⁻¹)⁻¹ right, and whitened w with x = L w.

        Parameters
        ----------
        operator
            A with an identity for a time basis.
        right
            (copies · components, nz, ny, nx); components vary fastest.
        tolerance
            Residual relative to the right-hand side at which to stop.
        start
            A first guess of w.
        """
        goal = self._spread(right)
        w = np.zeros_like(goal) if start is None else start
        rest = goal if start is None else goal - self._apply(operator, w)
        cured = self._cure(rest)
        direction = cured
        strength = _dot(rest, cured)
        limit = tolerance**2 * _dot(goal, self._cure(goal))
        for _ in range(MOST_ITERATIONS):
            busy = strength > limit
            if not busy.any():
                break
            image = self._apply(operator, direction)
            length = _ratio(strength, _dot(direction, image), busy)
            w = w + _each(length) * direction
            rest = rest - _each(length) * image
            cured = self._cure(rest)
            stronger = _dot(rest, cured)
            direction = cured + _each(_ratio(stronger, strength, busy)) * direction
            strength = stronger
        return self._collect(w), w

    def _sizes(self, count: int) -> FloatArray:
        return np.tile(self._size, count // len(self._size))[:, None, None]

    def _spread(self, x: ComplexArray) -> ComplexArray:
        """Lᴴ x, (components, blocks, q)."""
        spectrum = scipy.fft.fft2(x, norm="ortho")
        blocks = self._layout.gather(spectrum).reshape(len(x), self._root.shape[1], -1)
        return self._sizes(len(x)) * np.einsum("kqp,cqk->ckp", self._root, blocks, optimize=True)

    def _collect(self, w: ComplexArray) -> ComplexArray:
        """L w, (components, nz, ny, nx)."""
        blocks = np.einsum("kqp,ckp->cqk", self._root, self._sizes(len(w)) * w, optimize=True)
        spectrum = self._layout.scatter(
            np.ascontiguousarray(blocks).reshape(-1, *self._layout.blocks)
        )
        return scipy.fft.ifft2(spectrum.reshape(len(w), *self._shape), norm="ortho")

    def _apply(self, operator: GeneralOperator, w: ComplexArray) -> ComplexArray:
        return w + self._spread(operator.normal(self._collect(w)))

    def _cure(self, w: ComplexArray) -> ComplexArray:
        """(1 + LᴴGL)⁻¹ of the blocks."""
        inner = np.einsum("kqp,ckq->ckp", self._vectors.conj(), w, optimize=True)
        inner /= 1 + self._sizes(len(w)) ** 2 * self._values
        return np.einsum("kqp,ckp->ckq", self._vectors, inner, optimize=True)


def _dot(a: ComplexArray, b: ComplexArray) -> FloatArray:
    return np.einsum("ckp,ckp->c", a.conj(), b).real


def _ratio(upper: FloatArray, lower: FloatArray, where: NDArray[np.bool_]) -> FloatArray:
    return np.divide(upper, lower, out=np.zeros_like(upper), where=where & (lower > 0))


def _each(factor: FloatArray) -> FloatArray:
    return factor.astype(np.float32)[:, None, None]
