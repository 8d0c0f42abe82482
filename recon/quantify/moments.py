"""Inner products that a fit of many voxels needs, without ever forming its derivatives.

With e(t) = exp(iθ − i2πΔf t − Γt) the products of any two shifted patterns,

    Σ_t t^k (e φ_p)* (e φ_q) = Σ_t t^k exp(−2Γt) φ_p* φ_q,     k = 0, 1, 2,

depend on Γ alone. They are tabulated as Chebyshev series over its range, and only
Σ_t t^k (e φ_p)* y, k = 0, 1, is summed anew for every voxel.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Products:
    """Of V voxels, C pattern courses and B broad courses.

    Attributes
    ----------
    data
        Σ t^k (e φ_p)* y, (V, 2, C).
    pairs
        Σ t^k (e φ_p)* e φ_q, (V, 3, C, C).
    mixed
        Σ t^k (e φ_p)* β_b, (V, 2, C, B).
    broad_data, broad_pairs
        Σ β_b* y, (V, B), and Σ β_b* β_c, (B, B).
    energy
        Σ |y|², (V,).
    """

    data: ComplexArray
    pairs: ComplexArray
    mixed: ComplexArray
    broad_data: ComplexArray
    broad_pairs: ComplexArray
    energy: FloatArray

    def put(self, where: NDArray[np.integer] | NDArray[np.bool_], other: Products) -> None:
        """Take over the voxels `where` from others."""
        for name in ("data", "pairs", "mixed", "broad_data", "energy"):
            getattr(self, name)[where] = getattr(other, name)

    def linear_system(self) -> tuple[FloatArray, FloatArray]:
        """Normal matrix (V, n, n) and right side (V, n) of amounts and baseline, n = C + 2B.

        The baseline's coefficients run real, imaginary, real, …
        """
        voxels, _, count = self.data.shape
        broad = self.broad_pairs.shape[0]
        size = count + 2 * broad
        normal, right = np.zeros((voxels, size, size)), np.zeros((voxels, size))
        normal[:, :count, :count] = self.pairs[:, 0].real
        right[:, :count] = self.data[:, 0].real
        if broad:
            real, imag = slice(count, size, 2), slice(count + 1, size, 2)
            normal[:, :count, real], normal[:, :count, imag] = (
                self.mixed[:, 0].real,
                -self.mixed[:, 0].imag,
            )
            normal[:, count:, :count] = normal[:, :count, count:].transpose(0, 2, 1)
            normal[:, real, real] = normal[:, imag, imag] = self.broad_pairs.real
            normal[:, real, imag] = -self.broad_pairs.imag
            normal[:, imag, real] = self.broad_pairs.imag
            right[:, real], right[:, imag] = self.broad_data.real, self.broad_data.imag
        return normal, right

    def full_system(self, linear: FloatArray, free: list[int]) -> tuple[FloatArray, FloatArray]:
        """The same with the derivatives by the free ones of (Δf, Γ, θ), at amounts `linear`.

        The right side is that of the residual.
        """
        normal, right = self.linear_system()
        count = self.data.shape[2]
        amounts, broad = linear[:, :count], linear[:, count:]
        turned = np.einsum("vkpq,vq->vkp", self.pairs, amounts)
        size, first = normal.shape[1] + 3, normal.shape[1]
        whole = np.zeros((len(linear), size, size))
        whole[:, :first, :first] = normal
        gradient = np.zeros((len(linear), size))
        gradient[:, :first] = right - np.einsum("vij,vj->vi", normal, linear)
        rest = self.data - turned[:, :2]
        side = np.zeros((len(linear), 3, first))
        side[:, 0, :count] = 2 * np.pi * turned[:, 1].imag
        side[:, 1, :count] = -turned[:, 1].real
        side[:, 2, :count] = -turned[:, 0].imag
        if broad.shape[1]:
            coefficients = broad[:, ::2] + 1j * broad[:, 1::2]
            rest = rest - np.einsum("vkpb,vb->vkp", self.mixed, coefficients)
            seen = np.einsum("vkpb,vp->vkb", self.mixed.conj(), amounts)
            side[:, 0, count::2], side[:, 0, count + 1 :: 2] = (
                2 * np.pi * seen[:, 1].imag,
                -2 * np.pi * seen[:, 1].real,
            )
            side[:, 1, count::2], side[:, 1, count + 1 :: 2] = -seen[:, 1].real, -seen[:, 1].imag
            side[:, 2, count::2], side[:, 2, count + 1 :: 2] = -seen[:, 0].imag, seen[:, 0].real
        whole[:, first:, :first], whole[:, :first, first:] = side, side.transpose(0, 2, 1)
        inside = np.einsum("vp,vkp->vk", amounts, turned).real
        whole[:, first, first] = 4 * np.pi**2 * inside[:, 2]
        whole[:, first, first + 2] = whole[:, first + 2, first] = -2 * np.pi * inside[:, 1]
        whole[:, first + 1, first + 1] = inside[:, 2]
        whole[:, first + 2, first + 2] = inside[:, 0]
        along = np.einsum("vp,vkp->vk", amounts, rest)
        gradient[:, first] = -2 * np.pi * along[:, 1].imag
        gradient[:, first + 1] = -along[:, 1].real
        gradient[:, first + 2] = along[:, 0].imag
        keep = [*range(first), *(first + which for which in free)]
        return whole[:, keep][:, :, keep], gradient[:, keep]


class Moments:
    """Makes `Products` from data.

    Parameters
    ----------
    courses, broad
        φ (T, C) and β (T, B).
    times
        (T,), seconds.
    decay_bound
        Largest Γ, 1/s.
    """

    def __init__(
        self, courses: ComplexArray, broad: ComplexArray, times: FloatArray, decay_bound: float
    ) -> None:
        self.times, self.bound = np.asarray(times, float), decay_bound
        self.count, self.broad = courses.shape[1], broad.astype(np.complex64)
        conjugate = courses.conj()
        both = np.concatenate([conjugate, self.times[:, None] * conjugate], axis=1)
        mixed = (both[:, :, None] * broad[:, None]).reshape(len(times), -1)
        self._probe = both.astype(np.complex64)
        self._mixed = mixed.astype(np.complex64)
        self._broad_pairs = broad.conj().T @ broad
        pairs = conjugate[:, :, None] * courses[:, None]
        powers = self.times[:, None] ** np.arange(3)
        table = powers[:, :, None, None] * pairs[:, None]
        self._series = self._expanded(table.reshape(len(times), -1))
        steps = np.diff(self.times)
        self._even = len(steps) > 1 and bool(np.allclose(steps, steps[0], rtol=1e-6, atol=0))

    def _expanded(self, table: ComplexArray) -> ComplexArray:
        """Chebyshev coefficients of Σ_t exp(−2Γt) table(t) over 0 ≤ Γ ≤ bound."""
        depth = self.bound * float(self.times[-1])
        if depth == 0:
            return table.sum(axis=0)[None]
        count = int(16 + 6 * np.sqrt(depth))
        angle = np.pi * (np.arange(count) + 0.5) / count
        nodes = self.bound / 2 * (1 + np.cos(angle))
        values = np.exp(-2 * nodes[:, None] * self.times) @ table
        series = 2 / count * np.cos(np.arange(count)[:, None] * angle) @ values
        series[0] /= 2
        return series

    def pairs(self, decay: FloatArray) -> ComplexArray:
        """(V, 3, C, C) at decays Γ (V,)."""
        terms = len(self._series)
        if terms == 1:
            values = np.broadcast_to(self._series, (len(decay), self._series.shape[1])).copy()
        else:
            place = np.arccos(np.clip(2 * decay / self.bound - 1, -1, 1))
            values = np.cos(place[:, None] * np.arange(terms)) @ self._series
        return values.reshape(-1, 3, self.count, self.count)

    def factor(self, nuisance: FloatArray) -> ComplexArray:
        """e(t) of (Δf, Γ, θ), (V, T) complex64; even times as products of few powers."""
        shift, decay, phase = nuisance.T.astype(np.float64)
        rate = -2j * np.pi * shift - decay
        if not self._even:
            grown = 1j * phase[:, None] + rate[:, None] * self.times
            return np.exp(grown).astype(np.complex64)
        count, dwell = len(self.times), float(self.times[1] - self.times[0])
        inner = int(np.ceil(np.sqrt(count)))
        fine = np.exp(rate[:, None] * (dwell * np.arange(inner)) + 1j * phase[:, None])
        start = float(self.times[0])
        coarse = np.exp(rate[:, None] * (start + dwell * inner * np.arange(-(-count // inner))))
        grid = coarse.astype(np.complex64)[:, :, None] * fine.astype(np.complex64)[:, None]
        return grid.reshape(len(nuisance), -1)[:, :count]

    def products(self, signal: ComplexArray, energy: FloatArray, nuisance: FloatArray) -> Products:
        """Everything at the nuisances (V, 3) of signals (V, T)."""
        conjugate = self.factor(nuisance * np.array([-1, 1, -1], nuisance.dtype))
        data = (conjugate * signal) @ self._probe
        mixed = conjugate @ self._mixed
        return Products(
            data=data.reshape(-1, 2, self.count).astype(complex),
            pairs=self.pairs(nuisance[:, 1].astype(float)),
            mixed=mixed.reshape(len(signal), 2, self.count, self.broad.shape[1]).astype(complex),
            broad_data=(signal @ self.broad.conj()).astype(complex),
            broad_pairs=self._broad_pairs,
            energy=energy.copy(),
        )
