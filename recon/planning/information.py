"""The information matrix of a growing table of shots, and what one more shot would add.

M(κ') = λ_r G(κ') + ½ Γ_r⁻¹ for every spectral mode r (eigenvectors of the real part of the scaled
Gram matrix), made Hermitian under κ' → −κ' as a real unknown sees it. The criterion is

    f = Σ_r Σ_κ' tr(V M_r⁻¹) / (number of κ' and modes),   V the weights of the depths.

A shot adds λ_r w [h hᴴ(κ') + conj h hᴴ(−κ')]/2; f falls, to first order, by the correlation of the
kind's h hᴴ with B = Σ_r λ_r M_r⁻¹ V M_r⁻¹ over all shifts k at once; exactly, by two rank-one
updates per block. Source of the criterion: Pukelsheim, Optimal Design of Experiments
(A-optimality).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.forward import ForwardModel, ForwardOperator
from recon.planning.bound import Experiment
from recon.planning.candidates import Candidates

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]

Pair = tuple[int, int]


@dataclass(frozen=True, eq=False)
class Responses:
    """Responses of every kind, unshifted, and how they combine.

    Attributes
    ----------
    fields
        P(κ_f + q) K(κ_f) per kind over the grid's band, (kinds, nz, ny, nx), monotonic order.
    footprint
        F over unwrapped object frequencies, (2 ny, 2 nx).
    weight
        Inverse noise variance of a sample.
    """

    fields: ComplexArray
    footprint: FloatArray
    weight: float
    one_detector: bool

    @classmethod
    def of(cls, experiment: Experiment, candidates: Candidates) -> Responses:
        """Evaluate the kernels of all kinds through the forward model."""
        probe = candidates.protocol(
            [(kind, _centre(candidates)) for kind in range(len(candidates.kinds))], np.zeros(1)
        )
        model: ForwardModel = experiment.model(probe, np.ones((1, 1), complex))
        operator = ForwardOperator(model)
        tables = operator.tables
        fields = np.empty((len(candidates.kinds), *candidates.grid.shape), np.complex64)
        for shot in range(len(candidates.kinds)):
            response = tables.response(shot)[0]
            if model.is_one_detector:
                fields[shot] = 0
                row, column = tables.detector_place(shot)
                gain = np.sqrt(tables.gain)
                fields[shot, :, row, column] = response[:, row, column] * gain
            else:
                fields[shot] = response if tables.fused else response * tables.transfer(shot)
        footprint = operator.footprint.astype(np.float32)
        return cls(fields, footprint, float(model.encoding.weight[0]), model.is_one_detector)

    def at(self, candidates: Candidates, pair: Pair) -> ComplexArray:
        """h(κ') of one candidate, (nz, ny, nx), FFT order."""
        kind, place = pair
        _, ny, nx = candidates.grid.shape
        shift_y, shift_x = candidates.steps[place]
        top, left = ny - ny // 2 - shift_y, nx - nx // 2 - shift_x
        window = self.footprint[top : top + ny, left : left + nx]
        shift = (-(ny // 2 + shift_y), -(nx // 2 + shift_x))
        return np.roll(self.fields[kind] * window, shift, axis=(-2, -1))


class Information:
    """M for all modes, its inverse, and the criterion.

    Parameters
    ----------
    modes
        λ_r, (modes,).
    prior
        ½ Γ⁻¹ in scaled units, (ny, nx), FFT order.
    depth_weights
        V, (nz,).
    """

    def __init__(
        self, responses: Responses, modes: FloatArray, prior: FloatArray, depth_weights: FloatArray
    ) -> None:
        self.responses, self.modes = responses, np.asarray(modes, float)
        self.depth_weights = np.asarray(depth_weights, float)
        nz, (ny, nx) = len(depth_weights), prior.shape
        self.shape = (nz, ny, nx)
        rows, columns = (-np.arange(n) % n for n in (ny, nx))
        mirror = (rows[:, None] * nx + columns).ravel()
        everyone = np.arange(ny * nx)
        self.half = np.flatnonzero(everyone <= mirror)
        self.opposite = mirror[self.half]
        self.counts = np.where(self.half == self.opposite, 1.0, 2.0)
        self.prior = prior.ravel()[self.half]
        self.normal = np.zeros((len(self.half), nz, nz), complex)
        self.refresh()

    @property
    def share(self) -> float:
        """One over the number of values that the criterion averages."""
        nz, ny, nx = self.shape
        return 1 / (len(self.modes) * nz * ny * nx)

    def refresh(self) -> None:
        """Invert afresh."""
        eye = np.eye(self.shape[0])
        matrices = self.modes[:, None, None, None] * self.normal[None]
        matrices = matrices + self.prior[None, :, None, None] * eye
        self.inverse = np.linalg.inv(matrices)

    def criterion(self) -> float:
        """Mean weighted variance of a scaled unit, prior included: 1 before any shot."""
        diagonal = np.einsum("rkzz->rkz", self.inverse).real @ self.depth_weights
        return float(0.5 * self.share * (diagonal * self.counts).sum())

    def depth_variance(self) -> FloatArray:
        """Variance per depth, mean over modes, (nz,)."""
        diagonal = np.einsum("rkzz,k->z", self.inverse, self.counts).real
        return 0.5 * self.share * self.shape[0] * diagonal

    def slope(self) -> ComplexArray:
        """B = Σ_r λ_r M_r⁻¹ V M_r⁻¹ at every κ', (ny · nx, nz, nz)."""
        nz, ny, nx = self.shape
        half = np.zeros(self.normal.shape, complex)
        for mode, inverse in zip(self.modes, self.inverse, strict=True):
            half += mode * ((inverse * self.depth_weights) @ inverse)
        whole = np.empty((ny * nx, nz, nz), complex)
        whole[self.opposite] = half.conj()
        whole[self.half] = half
        return whole

    def vectors(self, h: ComplexArray) -> tuple[IntArray, ComplexArray]:
        """Blocks a shot touches, and its two vectors there, (touched, nz, 2), weights included."""
        flat = h.reshape(self.shape[0], -1).T.conj() * np.sqrt(0.5 * self.responses.weight)
        pair = np.stack([flat[self.half], flat[self.opposite].conj()], axis=-1)
        if not self.responses.one_detector:
            return np.arange(len(self.half)), pair
        touched = np.flatnonzero(np.abs(pair).sum(axis=(1, 2)))
        return touched, pair[touched]

    def fall(self, h: ComplexArray, sign: float = 1.0) -> float:
        """By how much the criterion falls if a shot is added (sign −1: taken away), exactly."""
        touched, pair = self.vectors(h)
        total = 0.0
        for mode, inverse in zip(self.modes, self.inverse[:, touched], strict=True):
            moved = inverse @ pair
            core = _core(pair, moved, sign * mode)
            outer = (moved.conj() * self.depth_weights[:, None]).transpose(0, 2, 1) @ moved
            traces = (core * outer.transpose(0, 2, 1)).sum(axis=(1, 2)).real
            total += float(traces @ self.counts[touched])
        return 0.5 * self.share * total

    def add(self, h: ComplexArray, sign: float = 1.0) -> None:
        """Add (or take away) a shot: two rank-one updates per block."""
        touched, pair = self.vectors(h)
        self.normal[touched] += sign * (pair @ pair.conj().transpose(0, 2, 1))
        for number, mode in enumerate(self.modes):
            inverse = self.inverse[number, touched]
            moved = inverse @ pair
            core = _core(pair, moved, sign * mode)
            self.inverse[number, touched] -= moved @ core @ moved.conj().transpose(0, 2, 1)


def _core(pair: ComplexArray, moved: ComplexArray, strength: float) -> ComplexArray:
    """(1/strength + Uᴴ M⁻¹ U)⁻¹ for two vectors per block, in closed form."""
    inner = pair.conj().transpose(0, 2, 1) @ moved
    inner[:, [0, 1], [0, 1]] += 1 / strength
    inverse = np.empty_like(inner)
    inverse[:, 0, 0], inverse[:, 1, 1] = inner[:, 1, 1], inner[:, 0, 0]
    inverse[:, 0, 1], inverse[:, 1, 0] = -inner[:, 0, 1], -inner[:, 1, 0]
    determinant = inner[:, 0, 0] * inner[:, 1, 1] - inner[:, 0, 1] * inner[:, 1, 0]
    return inverse / determinant[:, None, None]


class Scores:
    """First-order falls of every candidate at once."""

    def __init__(self, candidates: Candidates, responses: Responses) -> None:
        self.candidates, self.responses = candidates, responses
        nz, ny, nx = candidates.grid.shape
        self._upper = np.triu_indices(nz)
        self._lattice = (2 * ny, 2 * nx)
        self._products: list[ComplexArray] = []
        if not responses.one_detector:
            for field in responses.fields:
                product = field[self._upper[0]].conj() * field[self._upper[1]]
                twice = np.where(self._upper[0] == self._upper[1], 1, 2)[:, None, None]
                spectrum = scipy.fft.fft2(product * twice, self._lattice, workers=2)
                self._products.append(spectrum.astype(np.complex64))

    def falls(self, information: Information) -> FloatArray:
        """Approximate fall of the criterion for every candidate, (kinds, lattice)."""
        slope = information.slope()
        scale = 0.5 * self.responses.weight * information.share
        found = self._detector(slope) if self.responses.one_detector else self._camera(slope)
        return np.where(self.candidates.allowed, scale * found, -np.inf)

    def _camera(self, slope: ComplexArray) -> FloatArray:
        nz, ny, nx = self.candidates.grid.shape
        tall = slope.reshape(ny, nx, nz, nz)[:, :, self._upper[0], self._upper[1]]
        unwrapped = np.tile(tall.transpose(2, 0, 1), (1, 2, 2)).astype(np.complex64)
        unwrapped *= self.responses.footprint**2
        spectrum = scipy.fft.fft2(unwrapped, workers=2).conj()
        falls = np.empty(self.candidates.allowed.shape)
        rows = ny - ny // 2 - self.candidates.steps[:, 0]
        columns = nx - nx // 2 - self.candidates.steps[:, 1]
        for kind, product in enumerate(self._products):
            total = np.einsum("pyx,pyx->yx", product, spectrum)
            both = scipy.fft.ifft2(total.conj(), workers=2).real
            falls[kind] = both[rows % (2 * ny), columns % (2 * nx)]
        return falls

    def _detector(self, slope: ComplexArray) -> FloatArray:
        nz, ny, nx = self.candidates.grid.shape
        falls = np.empty(self.candidates.allowed.shape)
        blocks = slope.reshape(ny, nx, nz, nz)
        steps = self.candidates.steps
        for kind, field in enumerate(self.responses.fields):
            row, column = (int(i[0]) for i in np.nonzero(np.abs(field).sum(axis=0)))
            y = row - ny // 2 - steps[:, 0]
            x = column - nx // 2 - steps[:, 1]
            h = field[:, row, column].conj()
            curved = np.einsum("a,kab,b->k", h.conj(), blocks[y % ny, x % nx], h).real
            falls[kind] = curved * self.responses.footprint[y + ny, x + nx] ** 2
        return falls


def _centre(candidates: Candidates) -> int:
    return int(np.flatnonzero(~candidates.steps.any(axis=1))[0])
