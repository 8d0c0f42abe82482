"""Sparsity in wavelets at every position: the orthogonal prior averaged over all shifts.

    R(x) = Σ_j 2^(−j) ‖u_j‖₁,   u_j = detail filters of level j applied to x, without decimation

With filters scaled so that Σ |ĥ_i(κ)|² = 1 this is the mean over all circular shifts of the ℓ1 norm
of orthogonal wavelet coefficients, free of their block artefacts. The filters are products in the
lateral frequencies, so that DᴴD is a symbol for every wavelet, biorthogonal ones too, and any side
will do. Sources: Coifman & Donoho, Translation-invariant de-noising, in Wavelets and Statistics,
Springer (1995); Mallat, A Wavelet Tour of Signal Processing.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pywt
import scipy.fft
from numpy.typing import NDArray

from recon.errors import InputError
from recon.priors.base import Array, Frame, Term, group_soft_threshold, soft_threshold
from recon.symbol import IDENTITY, Symbol

ComplexArray = NDArray[np.complexfloating]


@dataclass(frozen=True)
class UndecimatedWaveletSparsity:
    """ℓ1 norm of cycle-spun wavelet coefficients.

    Attributes
    ----------
    wavelet
        Name of a discrete wavelet of PyWavelets, orthogonal or biorthogonal.
    levels
        Number of levels.
    joint
        All components share their places: one Euclidean length over them per coefficient.
    """

    wavelet: str = "db2"
    levels: int = 3
    joint: bool = False

    def __str__(self) -> str:
        shared = " shared by all components" if self.joint else ""
        return f"sparse in cycle-spun {self.wavelet} wavelets across each plane{shared}"

    def on(self, frame: Frame) -> UndecimatedWaveletTerm:
        """Bind to an unknown.

        Raises
        ------
        InputError
            The wavelet is unknown, or the levels are none or wider than the plane.
        """
        if self.wavelet not in pywt.wavelist(kind="discrete"):
            raise InputError(f"no discrete wavelet is called '{self.wavelet}'", "wavelet prior")
        side = min(frame.shape[-2:])
        if self.levels < 1 or 2**self.levels > side:
            raise InputError(
                f"{self.levels} levels on a plane of {side} voxels", "wavelet prior", "use fewer"
            )
        return UndecimatedWaveletTerm(pywt.Wavelet(self.wavelet), self.levels, frame, self.joint)


class UndecimatedWaveletTerm(Term):
    """Filters and their weighted ℓ1 norm; coefficients (filters, components, nz, ny, nx).

    The last filter is the coarse image, which costs nothing.
    """

    def __init__(self, bank: Any, levels: int, frame: Frame, joint: bool) -> None:
        self._filters, self.weights = _filters(bank, levels, frame.shape[-2:])
        self._joint = joint
        self.redundancy = len(self._filters)
        self._cast: dict[str, ComplexArray] = {}
        if not bank.orthogonal:
            self.symbol = Symbol((np.abs(self._filters) ** 2).sum(axis=0))
        else:
            self.symbol = IDENTITY

    def analyse(self, x: Array) -> Array:
        if np.isrealobj(x):
            spectrum = scipy.fft.rfft2(x)
            filtered = spectrum * self._of(spectrum)
            return scipy.fft.irfft2(filtered, x.shape[-2:], overwrite_x=True)
        spectrum = scipy.fft.fft2(x)
        return scipy.fft.ifft2(spectrum * self._of(spectrum), overwrite_x=True)

    def adjoint(self, u: Array) -> Array:
        if np.isrealobj(u):
            spectrum = scipy.fft.rfft2(u)
            spectrum *= self._of(spectrum).conj()
            return scipy.fft.irfft2(spectrum.sum(axis=0), u.shape[-2:], overwrite_x=True)
        spectrum = scipy.fft.fft2(u)
        spectrum *= self._of(spectrum).conj()
        return scipy.fft.ifft2(spectrum.sum(axis=0), overwrite_x=True)

    def weighted(self, planes: NDArray[np.floating]) -> Symbol:
        return Symbol(planes[:, None, None] * np.asarray(self.symbol.lateral))

    def value(self, u: Array) -> float:
        axis = (1, 2, 3) if self._joint else (1, 2, 3, 4)
        size = np.sqrt((np.abs(u) ** 2).sum(axis=1)) if self._joint else np.abs(u)
        return float(size.sum(axis=axis) @ self.weights)

    def prox(self, u: Array, step: Any) -> Array:
        shape = (-1, *(1,) * 3) if self._joint else (-1, *(1,) * 4)
        threshold = (step * self.weights.reshape(shape)).astype(u.real.dtype)
        if self._joint:
            return group_soft_threshold(u, threshold, axis=1)
        return soft_threshold(u, threshold)

    def _of(self, spectrum: ComplexArray) -> ComplexArray:
        """The filters at the frequencies and the precision of a spectrum."""
        columns = spectrum.shape[-1]
        key = f"{spectrum.dtype}{columns}"
        if key not in self._cast:
            part = self._filters[..., :columns].astype(spectrum.dtype)
            self._cast[key] = part[:, None, None]
        return self._cast[key]


def _filters(
    bank: Any, levels: int, sides: tuple[int, ...]
) -> tuple[ComplexArray, NDArray[np.floating]]:
    """Transfer functions (3 levels + 1, ny, nx), finest first, and their weights 2^(−level)."""
    coarse = np.ones(sides, complex)
    found, weights = [], []
    for level in range(levels):
        low_y, low_x = (_transfer(bank.dec_lo, level, side) for side in sides)
        high_y, high_x = (_transfer(bank.dec_hi, level, side) for side in sides)
        for rows, columns in ((high_y, low_x), (low_y, high_x), (high_y, high_x)):
            found.append(coarse * rows[:, None] * columns)
            weights.append(0.5 ** (level + 1))
        coarse = coarse * low_y[:, None] * low_x
    return np.array([*found, coarse]), np.array([*weights, 0.0])


def _transfer(taps: Any, level: int, side: int) -> ComplexArray:
    """Frequency response of a filter dilated by 2^level, with |low|² + |high|² = 1."""
    angle = 2 * np.pi * np.fft.fftfreq(side) * 2**level
    return np.exp(-1j * np.outer(angle, np.arange(len(taps)))) @ np.asarray(taps) / np.sqrt(2)
