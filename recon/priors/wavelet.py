"""Sparsity in an orthogonal wavelet basis across each plane.

R(x) = Σ |(W x)_i| over the detail coefficients, W the orthogonal periodised wavelet transform over
(y, x) of every plane and component. Source: Mallat, A Wavelet Tour of Signal Processing.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pywt
from numpy.typing import NDArray

from recon.errors import InputError
from recon.priors.base import (
    Array,
    Frame,
    Shape,
    Term,
    group_soft_threshold,
    soft_threshold,
)
from recon.symbol import Symbol


@dataclass(frozen=True)
class WaveletSparsity:
    """ℓ1 norm of orthogonal wavelet coefficients.

    Attributes
    ----------
    wavelet
        Name of an orthogonal discrete wavelet of PyWavelets.
    levels
        Number of levels at most; fewer where the sides do not halve so often.
    joint
        All components share their places: one Euclidean length over them per coefficient.
    """

    wavelet: str = "db4"
    levels: int = 4
    joint: bool = False

    def __str__(self) -> str:
        shared = " shared by all components" if self.joint else ""
        return f"sparse in {self.wavelet} wavelets across each plane{shared}"

    def on(self, frame: Frame) -> WaveletTerm:
        """Bind to an unknown.

        Raises
        ------
        InputError
            The wavelet is not orthogonal or unknown, or a side is odd.
        """
        if self.wavelet not in pywt.wavelist(kind="discrete"):
            raise InputError(f"no discrete wavelet is called '{self.wavelet}'", "wavelet prior")
        bank = pywt.Wavelet(self.wavelet)
        if not bank.orthogonal:
            raise InputError(
                f"wavelet '{self.wavelet}' is not orthogonal", "wavelet prior", "use db4 or sym8"
            )
        return WaveletTerm(
            bank, possible_levels(frame.shape, bank.dec_len, self.levels), self.joint
        )


class WaveletTerm(Term):
    """W and its ℓ1 norm; coefficients keep the unknown's shape (pyramid layout)."""

    def __init__(self, bank: Any, levels: int, joint: bool = False) -> None:
        self._bank = bank
        self._joint = joint
        self._levels = levels

    def analyse(self, x: Array) -> Array:
        u = x.copy()
        ny, nx = x.shape[-2:]
        for _ in range(self._levels):
            approximation, details = pywt.dwt2(
                u[..., :ny, :nx], self._bank, mode="periodization", axes=(-2, -1)
            )
            half_y, half_x = ny // 2, nx // 2
            u[..., :half_y, :half_x] = approximation
            u[..., half_y:ny, :half_x] = details[0]
            u[..., :half_y, half_x:nx] = details[1]
            u[..., half_y:ny, half_x:nx] = details[2]
            ny, nx = half_y, half_x
        return u

    def adjoint(self, u: Array) -> Array:
        x = u.copy()
        for level in reversed(range(self._levels)):
            ny, nx = u.shape[-2] >> level, u.shape[-1] >> level
            half_y, half_x = ny // 2, nx // 2
            parts = (
                x[..., half_y:ny, :half_x],
                x[..., :half_y, half_x:nx],
                x[..., half_y:ny, half_x:nx],
            )
            x[..., :ny, :nx] = pywt.idwt2(
                (x[..., :half_y, :half_x], parts), self._bank, mode="periodization", axes=(-2, -1)
            )
        return x

    def weighted(self, planes: NDArray[np.floating]) -> Symbol:
        return Symbol(planes[:, None, None])

    def value(self, u: Array) -> float:
        ny, nx = self._coarse(u)
        size = np.sqrt((np.abs(u) ** 2).sum(axis=0)) if self._joint else np.abs(u)
        return float(size.sum() - size[..., :ny, :nx].sum())

    def prox(self, u: Array, step: Any) -> Array:
        ny, nx = self._coarse(u)
        shrink = group_soft_threshold if self._joint else soft_threshold
        shrunk = shrink(u, np.asarray(step, u.real.dtype))
        shrunk[..., :ny, :nx] = u[..., :ny, :nx]
        return shrunk

    def _coarse(self, u: Array) -> tuple[int, int]:
        return u.shape[-2] >> self._levels, u.shape[-1] >> self._levels


def possible_levels(shape: Shape, filter_length: int, most: int) -> int:
    """How often both sides halve without becoming odd or shorter than half the filter."""
    sides, levels = shape[-2:], 0
    while levels < most and all(
        side % 2 == 0 and side >= filter_length for side in (s >> levels for s in sides)
    ):
        levels += 1
    if levels == 0:
        raise InputError(
            f"a plane of {sides[0]} x {sides[1]} voxels cannot be halved",
            "wavelet prior",
            "use even sides of at least the filter's length, or another prior",
        )
    return levels
