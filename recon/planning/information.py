"""The information matrix of a growing table of shots, and what one more shot would add.

Object frequencies κ' that alias onto one another share a block (one κ' alone when there is a
channel per voxel). A block has M = ½Γ⁻¹ + Σ_j ½(u uᴴ + v vᴴ), where shot j has there, with L the
factor of its Gram matrix (`recon.planning.spectra`) and w its weight,

    u = √w L ⊗ conj h(κ'),   v = √w conj L ⊗ h(−κ'),

v because the unknown is real. The criterion is the mean variance, weighted over depths by V,

    f = Σ_κ' tr(V M⁻¹) / (number of κ' and components),

which falls by a rank-two update per block. Source of the criterion: Pukelsheim, Optimal Design
of Experiments (A-optimality).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from recon.planning.bound import Expectation
from recon.planning.responses import Pair, Responses
from recon.planning.spectra import Spectra

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]


class Cosets:
    """Which object frequencies share a block, and which blocks are each other's mirror image.

    Attributes
    ----------
    members, opposite
        Flat indices (FFT order) of κ' and −κ' in each independent block, (blocks, aliases).
    counts
        1 for a block that is its own mirror image, else 2.
    """

    def __init__(self, shape: tuple[int, int], aliases: tuple[int, int]) -> None:
        (ny, nx), (a, b) = shape, aliases
        flat = np.arange(ny * nx).reshape(a, ny // a, b, nx // b)
        every = flat.transpose(1, 3, 0, 2).reshape(-1, a * b)
        rows, columns = (-np.arange(n) % n for n in shape)
        mirror = (rows[:, None] * nx + columns).ravel()
        coset = np.empty(ny * nx, int)
        coset[every] = np.arange(len(every))[:, None]
        partner = coset[mirror[every[:, 0]]]
        kept = np.flatnonzero(np.arange(len(every)) <= partner)
        self.members = every[kept]
        self.opposite = mirror[self.members]
        self.counts = np.where(kept == partner[kept], 1.0, 2.0)


class Information:
    """M and its inverse in every block, and the criterion.

    Parameters
    ----------
    expectation
        Gives ½ Γ⁻¹ in scaled units.
    """

    def __init__(self, responses: Responses, spectra: Spectra, expectation: Expectation) -> None:
        self.responses, self.spectra = responses, spectra
        self.shape = responses.candidates.grid.shape
        self.cosets = Cosets(self.shape[1:], responses.aliases)
        self.depth_weights: FloatArray = np.ones(self.shape[0])
        grid = responses.candidates.grid
        members = (0.5 / expectation.spectrum(grid)).ravel()[self.cosets.members]
        diagonal = np.tile(np.repeat(members, self.shape[0], axis=1), (1, spectra.components))
        blocks, size = diagonal.shape
        self.prior = diagonal[:, :, None] * expectation.axial_precision(grid, size)
        self.data = np.zeros((spectra.modes, blocks, size, size), complex)
        self.refresh()

    @property
    def share(self) -> float:
        """One over the number of values that the criterion averages."""
        return 1 / (self.spectra.modes * self.spectra.components * float(np.prod(self.shape)))

    @property
    def diagonal_weights(self) -> FloatArray:
        """V as a block's diagonal, (size,)."""
        return np.tile(self.depth_weights, self.prior.shape[1] // self.shape[0])

    def refresh(self) -> None:
        """Invert afresh."""
        self.inverse = np.linalg.inv(self.data + self.prior)

    def set_table(self, pairs: list[Pair]) -> None:
        """Replace whatever there is by a table of shots."""
        self.data[:] = 0
        for pair in pairs:
            touched, vectors = self.vectors(pair)
            self.data[:, touched] += vectors @ vectors.conj().swapaxes(-1, -2)
        self.refresh()

    def criterion(self) -> float:
        """Mean weighted variance of a scaled unit, prior included: 1 before any shot."""
        return float(self.depth_variance() @ self.depth_weights) / self.shape[0]

    def depth_variance(self) -> FloatArray:
        """Variance per depth, mean over species, (nz,)."""
        diagonal = np.einsum("rkaa,k->a", self.inverse, self.cosets.counts).real
        per_depth = diagonal.reshape(-1, self.shape[0]).sum(axis=0)
        return np.asarray(0.5 * self.share * self.shape[0] * per_depth)

    def slope(self) -> ComplexArray:
        """M⁻¹ V M⁻¹, (modes, blocks, size, size): minus the derivative of tr(V M⁻¹)."""
        return np.asarray((self.inverse * self.diagonal_weights) @ self.inverse)

    def vectors(self, pair: Pair) -> tuple[IntArray, ComplexArray]:
        """Blocks a candidate touches, and √½(u, v) there, (modes, touched, size, 2 rank)."""
        kind = self.responses.candidates.kinds[pair[0]]
        factor = self.spectra.factors[self.spectra.place(kind.evolution_s)]
        flat = self.responses.at(pair).reshape(self.shape[0], -1).T.conj()
        flat = flat * np.sqrt(0.5 * self.responses.weight * self.responses.candidates.gain[pair])
        blocks = len(self.cosets.members)
        here = flat[self.cosets.members].reshape(blocks, -1)
        there = flat[self.cosets.opposite].conj().reshape(blocks, -1)
        touched = np.arange(blocks)
        if self.responses.one_detector:
            touched = np.flatnonzero(np.abs(here).sum(axis=1) + np.abs(there).sum(axis=1))
        sides = [
            np.einsum("rcp,ka->rkcap", f, side[touched])
            for f, side in ((factor, here), (factor.conj(), there))
        ]
        both = np.concatenate(sides, axis=-1)
        return touched, both.reshape(*both.shape[:2], -1, both.shape[-1])

    def fall(self, pair: Pair, strength: float = 1.0) -> float:
        """By how much the criterion falls if a shot is added (strength −1: taken away), exactly."""
        touched, vectors = self.vectors(pair)
        total = 0.0
        for inverse, u in zip(self.inverse, vectors, strict=True):
            moved = inverse[touched] @ u
            core = _core(u, moved, strength)
            outer = _inner(moved, moved * self.diagonal_weights[:, None])
            traces = np.einsum("kab,kba->k", core, outer).real
            total += float(traces @ self.cosets.counts[touched])
        return 0.5 * self.share * total

    def add(self, pair: Pair, strength: float = 1.0) -> None:
        """Add (or take away) a shot by updates of low rank."""
        touched, vectors = self.vectors(pair)
        for number, u in enumerate(vectors):
            moved = self.inverse[number, touched] @ u
            core = _core(u, moved, strength)
            self.data[number, touched] += strength * (u @ u.conj().swapaxes(1, 2))
            self.inverse[number, touched] -= moved @ core @ moved.conj().swapaxes(1, 2)


def _core(u: ComplexArray, moved: ComplexArray, strength: float) -> ComplexArray:
    """(1/strength + Uᴴ M⁻¹ U)⁻¹ per block; in closed form for two vectors."""
    inner = _inner(u, moved)
    index = np.arange(inner.shape[-1])
    inner[:, index, index] += 1 / strength
    if len(index) != 2:
        return np.linalg.inv(inner)
    inverse = np.empty_like(inner)
    inverse[:, 0, 0], inverse[:, 1, 1] = inner[:, 1, 1], inner[:, 0, 0]
    inverse[:, 0, 1], inverse[:, 1, 0] = -inner[:, 0, 1], -inner[:, 1, 0]
    determinant = inner[:, 0, 0] * inner[:, 1, 1] - inner[:, 0, 1] * inner[:, 1, 0]
    return inverse / determinant[:, None, None]


def _inner(left: ComplexArray, right: ComplexArray) -> ComplexArray:
    """leftᴴ right per block, (blocks, vectors, vectors)."""
    count = left.shape[-1]
    found = np.empty((len(left), count, count), complex)
    conjugate = left.conj()
    for row in range(count):
        for column in range(count):
            found[:, row, column] = np.einsum("kn,kn->k", conjugate[..., row], right[..., column])
    return found
