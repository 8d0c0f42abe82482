"""Few distinct time courses or mixtures: low rank over voxels × components.

    R(x) = (1/K) Σ_k Σ_patches ‖X_patch‖_*

X_patch has a row per voxel of the patch and a column per component; K tilings, each shifted along
the diagonal, so that no seam stays in one place. Shrinkage of the singular values goes through the
small Gram matrix XᴴX. Sources: Cai, Candès & Shen, SIAM J. Optim. 20:1956 (2010); Trzasko,
IEEE SSP (2013) for local patches.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.priors.base import Array, Frame, Pointwise, Term


@dataclass(frozen=True)
class LowRank:
    """Nuclear norm over all voxels × components."""

    def __str__(self) -> str:
        return "few independent time courses or mixtures (low rank)"

    def on(self, frame: Frame) -> LowRankTerm:
        """Bind to an unknown."""
        _more_than_one(frame)
        return LowRankTerm()


@dataclass(frozen=True)
class LocalLowRank:
    """Nuclear norms over patches that span the depth.

    Attributes
    ----------
    patch
        Lateral side of a patch, voxels; both sides of the plane must be multiples of it.
    tilings
        Number of shifted tilings.
    """

    patch: int = 8
    tilings: int = 2

    def __str__(self) -> str:
        return f"few independent mixtures in every {self.patch} x {self.patch} patch (low rank)"

    def on(self, frame: Frame) -> LocalLowRankTerm:
        """Bind to an unknown.

        Raises
        ------
        InputError
            The patches do not tile the plane, or there is one component only.
        """
        _more_than_one(frame)
        sides = frame.shape[-2:]
        if self.patch < 1 or self.tilings < 1 or any(side % self.patch for side in sides):
            raise InputError(
                f"patches of {self.patch} do not tile a plane of {sides[0]} x {sides[1]} voxels",
                "low-rank prior",
                "choose a divisor of both sides",
            )
        return LocalLowRankTerm(self.patch, self.tilings)


class LowRankTerm(Pointwise):
    """One matrix."""

    def weighted(self, planes: NDArray[np.floating]) -> None:
        """The planes share their singular vectors, so they share the step."""

    def value(self, u: Array) -> float:
        return float(np.linalg.svd(u.reshape(len(u), -1).T, compute_uv=False).sum())

    def prox(self, u: Array, step: float) -> Array:
        return shrink_singular_values(u.reshape(len(u), -1).T, step).T.reshape(u.shape)


class LocalLowRankTerm(Term):
    """Shifted tilings, (tilings, components, nz, ny, nx), over √K so that DᴴD = 1."""

    def __init__(self, patch: int, tilings: int) -> None:
        self._patch = patch
        self.redundancy = tilings
        self._shifts = [round(place * patch / tilings) for place in range(tilings)]

    def analyse(self, x: Array) -> Array:
        moved = [np.roll(x, (shift, shift), (-2, -1)) for shift in self._shifts]
        return np.stack(moved) * self._scale(x)

    def adjoint(self, u: Array) -> Array:
        back = [
            np.roll(one, (-shift, -shift), (-2, -1))
            for one, shift in zip(u, self._shifts, strict=True)
        ]
        return np.sum(back, axis=0) * self._scale(u)

    def value(self, u: Array) -> float:
        values = np.linalg.svd(self._matrices(u), compute_uv=False)
        return float(values.sum() * self._scale(u))

    def prox(self, u: Array, step: float) -> Array:
        shrunk = shrink_singular_values(self._matrices(u), step * float(self._scale(u)))
        tilings, components, nz, ny, nx = u.shape
        p = self._patch
        split = shrunk.reshape(tilings, ny // p, nx // p, nz, p, p, components)
        return np.ascontiguousarray(split.transpose(0, 6, 3, 1, 4, 2, 5)).reshape(u.shape)

    def _matrices(self, u: Array) -> Array:
        """(tilings · patches, voxels, components)."""
        tilings, components, nz, ny, nx = u.shape
        p = self._patch
        split = u.reshape(tilings, components, nz, ny // p, p, nx // p, p)
        return split.transpose(0, 3, 5, 2, 4, 6, 1).reshape(-1, nz * p * p, components)

    def _scale(self, like: Array) -> np.floating:
        return like.real.dtype.type(len(self._shifts) ** -0.5)


def shrink_singular_values(matrices: Array, threshold: float) -> Array:
    """Subtract a threshold from the singular values of matrices (..., rows, columns).

    Through the Gram matrix in double precision: right for few columns, singular values below
    1e-8 of the largest being taken as none.
    """
    gram = np.matmul(matrices.conj().swapaxes(-1, -2), matrices)
    wide = np.complex128 if np.iscomplexobj(gram) else np.float64
    squares, vectors = np.linalg.eigh(gram.astype(wide))
    values = np.sqrt(np.maximum(squares, 0))
    floor = 1e-8 * values.max(axis=-1, keepdims=True) + np.finfo(np.float64).tiny
    factor = np.maximum(1 - threshold / np.maximum(values, floor), 0)
    mix = np.matmul(vectors * factor[..., None, :], vectors.conj().swapaxes(-1, -2))
    return np.matmul(matrices, mix.astype(matrices.dtype))


def _more_than_one(frame: Frame) -> None:
    if frame.shape[0] < 2:
        raise InputError("one component has no rank to lower", "low-rank prior", "leave it out")
