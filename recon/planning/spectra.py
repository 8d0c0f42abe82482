"""How the time axis of a shot tells species apart: factors of its Gram matrix.

Shots that share their sample times have one Gram matrix S, and its eigenvectors part the problem
into one of its own per eigenvalue. Shots with different evolution times t1 have different ones,

    S_t = L_t L_tᴴ,   L_t (species, rank),

and the species share their blocks. Units are the expected spreads.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.planning.bound import Experiment
from recon.protocol import Protocol

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

NEGLIGIBLE = 1e-10


@dataclass(frozen=True, eq=False)
class Spectra:
    """Factors of the Gram matrices.

    Attributes
    ----------
    evolutions
        The different evolution times, ascending, seconds, (evolutions,).
    factors
        L per evolution, (evolutions, modes, components, rank): shared sample times have one
        evolution and as many modes as species, of one component each; otherwise one mode.
    """

    evolutions: FloatArray
    factors: ComplexArray

    @classmethod
    def of(
        cls, experiment: Experiment, sample_times: FloatArray, evolutions: FloatArray
    ) -> Spectra:
        """From the species' time courses.

        With shared sample times the imaginary part of S, which couples species through the odd
        part of G, is left out; the bound keeps it.
        """
        plain = Protocol.plain(np.zeros((1, 3)), np.zeros((1, 2)), 1, sample_times)
        unit = np.asarray(experiment.expectation.spread_mM)
        grams = []
        for time in evolutions:
            basis = species_basis(experiment.species, experiment.instrument, plain, float(time))
            grams.append((basis * unit).conj().T @ (basis * unit))
        if len(grams) == 1:
            modes = np.maximum(np.linalg.eigvalsh(grams[0].real), 0)
            return cls(evolutions, np.sqrt(modes)[None, :, None, None].astype(complex))
        return cls(evolutions, np.array([_root(gram) for gram in _same_rank(grams)])[:, None])

    @property
    def modes(self) -> int:
        """Problems that are apart."""
        return self.factors.shape[1]

    @property
    def components(self) -> int:
        """Species that share a block."""
        return self.factors.shape[2]

    def place(self, evolution: float) -> int:
        """Which evolution time this is."""
        return int(np.argmin(np.abs(self.evolutions - evolution)))


def _same_rank(grams: list[ComplexArray]) -> list[tuple[FloatArray, ComplexArray]]:
    """Eigenvalues and -vectors, all with as many as the largest rank needs."""
    pairs = [np.linalg.eigh(gram) for gram in grams]
    largest = max(values.max() for values, _ in pairs)
    rank = max(int((values > NEGLIGIBLE * largest).sum()) for values, _ in pairs)
    return [(np.maximum(values[-rank:], 0), vectors[:, -rank:]) for values, vectors in pairs]


def _root(pair: tuple[FloatArray, ComplexArray]) -> ComplexArray:
    return pair[1] * np.sqrt(pair[0])
