"""Normal operators that fit the blocks: a function of lateral frequency plus matrices along z."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Symbol:
    """DᴴD = lateral(κ') ⊗ 1 + 1 ⊗ axial, the same for every component.

    Attributes
    ----------
    lateral
        (ny, nx) in FFT order, or a scalar, or (nz, 1 or ny, 1 or nx) where planes differ.
    axial
        (nz, nz) symmetric, or (nz, nz, ny, nx) where it differs from frequency to frequency, or
        None.
    """

    lateral: FloatArray | float
    axial: FloatArray | None = None

    def __add__(self, other: Symbol) -> Symbol:
        axial = self.axial if other.axial is None else other.axial
        if self.axial is not None and other.axial is not None:
            axial = _together(self.axial, other.axial)
        return Symbol(self.lateral + other.lateral, axial)

    def scaled(self, factor: float) -> Symbol:
        """The symbol times a number."""
        return Symbol(self.lateral * factor, None if self.axial is None else self.axial * factor)

    def apply(self, x: Array) -> Array:
        """DᴴD x for an unknown (components, nz, ny, nx), real or complex; its kind is kept."""
        kind = x.real.dtype
        lateral = np.asarray(self.lateral, kind)
        if lateral.ndim == 0 or lateral.shape[-2:] == (1, 1):
            image = x * lateral
        elif np.isrealobj(x):
            spectrum = scipy.fft.rfft2(x) * lateral[..., : x.shape[-1] // 2 + 1]
            image = scipy.fft.irfft2(spectrum, x.shape[-2:])
        else:
            image = scipy.fft.ifft2(scipy.fft.fft2(x) * lateral)
        if self.axial is None:
            return image
        axial = self.axial.astype(kind)
        if axial.ndim == 2:
            return image + np.einsum("zw,cwyx->czyx", axial, x)
        spectrum = np.einsum("zwyx,cwyx->czyx", axial, scipy.fft.fft2(x))
        coupled = scipy.fft.ifft2(spectrum, overwrite_x=True)
        return image + (coupled.real if np.isrealobj(x) else coupled)


def _together(one: FloatArray, other: FloatArray) -> FloatArray:
    """Sum of axial matrices, whether they differ between frequencies or not."""
    if one.ndim == other.ndim:
        return one + other
    few, many = (one, other) if one.ndim == 2 else (other, one)
    return few[..., None, None] + many


IDENTITY = Symbol(1.0)
