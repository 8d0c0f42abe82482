"""Exact single-quantum transitions of one coupled group, block by block of conserved Fz.

Every set of like spins that flip one another keeps its total Fz, so H is diagonalised in blocks
labelled by those totals. H and F+ are real in the product basis, so the blocks are real and
symmetric and the intensities are real. A line runs from a state b to a state a with one unit
more Fz in one set of protons; after a pulse <F+>(t) = Σ |<a|F+|b>|² exp(−i 2π (E_b − E_a) t).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from recon.physics.spins.system import PROTON, SpinSystem

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Basis:
    """Product states of composite spins, sorted into blocks of conserved Fz.

    `twice_spin` (K,): 2I per spin; `levels` (states, K): I + m of every spin in every state, whose
    mixed-radix number with strides `stride` (K,) is the state's index; `members[block]` (n,):
    states of a block; `position` (states,): a state's place within its block; `block_of`: Fz label
    to block.
    """

    twice_spin: IntArray
    stride: IntArray
    levels: IntArray
    members: list[IntArray]
    position: IntArray
    block_of: dict[tuple[int, ...], int]

    @classmethod
    def of(cls, twice_spin: tuple[int, ...], sets: list[list[int]]) -> Basis:
        """All product states; a label holds the sum of I + m over each of `sets`."""
        sizes = np.array(twice_spin, dtype=np.int64) + 1
        levels = np.stack([axis.ravel() for axis in np.indices(tuple(sizes))], axis=1)
        stride = np.append(np.cumprod(sizes[:0:-1])[::-1], 1).astype(np.int64)
        totals = np.stack([levels[:, spins].sum(axis=1) for spins in sets], axis=1)
        labels, block = np.unique(totals, axis=0, return_inverse=True)
        block = block.ravel()
        members = [np.flatnonzero(block == number) for number in range(len(labels))]
        position = np.empty(len(levels), dtype=np.int64)
        for states in members:
            position[states] = np.arange(len(states))
        block_of = {tuple(label): number for number, label in enumerate(labels.tolist())}
        return cls(sizes - 1, stride, levels, members, position, block_of)

    def raised(self, states: IntArray, spin: int) -> tuple[IntArray, FloatArray]:
        """<m+1|I+|m> = √(I(I+1) − m(m+1)) of one spin in each state; zero from the top."""
        level = self.levels[states, spin]
        amplitude = np.sqrt((self.twice_spin[spin] - level) * (level + 1.0))
        return states + self.stride[spin], amplitude

    def lowered(self, states: IntArray, spin: int) -> tuple[IntArray, FloatArray]:
        """<m−1|I−|m> of one spin in each state; zero from the bottom."""
        level = self.levels[states, spin]
        amplitude = np.sqrt((self.twice_spin[spin] - level + 1.0) * level)
        return states - self.stride[spin], amplitude


def block_hamiltonian(
    basis: Basis,
    block: int,
    frequencies: FloatArray,
    couplings: FloatArray,
    like: NDArray[np.bool_],
) -> FloatArray:
    """H of one block in Hz, (n, n), real symmetric; unlike spins keep IzSz only."""
    states = basis.members[block]
    quantum = basis.levels[states] - basis.twice_spin / 2
    diagonal = np.einsum("nk,kl,nl->n", quantum, np.triu(couplings, 1), quantum, optimize=True)
    hamiltonian = np.diag(diagonal - quantum @ frequencies)
    for up, down in zip(*np.nonzero(couplings * like), strict=True):
        between, first = basis.lowered(states, down)
        reached, second = basis.raised(states, up)
        amplitude = first * second
        found = np.flatnonzero(amplitude)
        rows = basis.position[(reached + between - states)[found]]
        hamiltonian[rows, found] += couplings[up, down] / 2 * amplitude[found]
    return hamiltonian


def transitions(
    system: SpinSystem, twice_spin: tuple[int, ...], frequencies: FloatArray, dropped: float
) -> Iterator[tuple[FloatArray, FloatArray, FloatArray]]:
    """Lines of a coupled group whose spins are the composite spins `twice_spin`.

    Parameters
    ----------
    system, frequencies
        One coupled group and its ν_k, (K,), Hz.
    dropped
        Weak lines are left out while they surely hold less than this share of all strength.

    Yields
    ------
    frequency E_b − E_a in Hz, strength |<a|F+|b>|² and decay rate in 1/s, each (lines,). The
    strengths add up to Tr F−F+ = Σ_protons (2/3) I(I+1) × states. The rate of a line is the mean of
    the spins' rates 1/T2 weighted with |<a|I+_k|b>|²: exact for first-order spectra and for two
    spins, an estimate in between.
    """
    sets = system.flip_flop_groups()
    basis = Basis.of(twice_spin, sets)
    steps = _proton_steps(system, basis, sets)
    floor = dropped * _total_strength(system, basis) / _pairs_of_states(basis, steps)
    blocks = sorted({block for lower, upper, _ in steps for block in (lower, upper)})
    coupling = system.couplings, system.like_nuclei
    solved = {
        block: _solved(block_hamiltonian(basis, block, frequencies, *coupling)) for block in blocks
    }
    for lower, upper, spins in steps:
        yield _lines_between(basis, (lower, upper), spins, solved, 1 / system.decay_times, floor)


def _solved(hamiltonian: FloatArray) -> tuple[FloatArray, FloatArray]:
    energies, vectors = scipy.linalg.eigh(
        hamiltonian, overwrite_a=True, check_finite=False, driver="evd"
    )
    return energies, vectors


def _proton_steps(
    system: SpinSystem, basis: Basis, sets: list[list[int]]
) -> list[tuple[int, int, list[int]]]:
    """Every (lower block, upper block, spins) between which F+ of a set of protons acts."""
    steps = []
    for label, lower in basis.block_of.items():
        for which, spins in enumerate(sets):
            above = tuple(total + (which == number) for number, total in enumerate(label))
            upper = basis.block_of.get(above)
            if system.nuclei[spins[0]] == PROTON and upper is not None:
                steps.append((lower, upper, spins))
    return steps


def _total_strength(system: SpinSystem, basis: Basis) -> float:
    spin = basis.twice_spin[np.array(system.nuclei) == PROTON] / 2
    return float(2 / 3 * (spin * (spin + 1)).sum() * len(basis.levels))


def _pairs_of_states(basis: Basis, steps: list[tuple[int, int, list[int]]]) -> int:
    return max(1, sum(len(basis.members[a]) * len(basis.members[b]) for a, b, _ in steps))


def _lines_between(
    basis: Basis,
    pair: tuple[int, int],
    spins: list[int],
    solved: dict[int, tuple[FloatArray, FloatArray]],
    rates: FloatArray,
    floor: float,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Lines from block pair[0] to block pair[1] by F+ of `spins`."""
    (energy_b, vectors_b), (energy_a, vectors_a) = solved[pair[0]], solved[pair[1]]
    if np.ptp(rates[spins]) == 0:
        strength = _raising(basis, pair, spins, vectors_b, vectors_a) ** 2
        kept = np.nonzero(strength > floor)
        rate = np.full(len(kept[0]), rates[spins[0]])
    else:
        each = [_raising(basis, pair, [spin], vectors_b, vectors_a) for spin in spins]
        strength = np.sum(each, axis=0) ** 2
        kept = np.nonzero(strength > floor)
        weight = np.stack([part[kept] ** 2 for part in each])
        rate = rates[spins] @ weight / weight.sum(axis=0)
    return energy_b[kept[1]] - energy_a[kept[0]], strength[kept], rate


def _raising(
    basis: Basis,
    pair: tuple[int, int],
    spins: list[int],
    vectors_b: FloatArray,
    vectors_a: FloatArray,
) -> FloatArray:
    """<a|Σ_k I+_k|b> between eigenvectors of two blocks, (n_a, n_b)."""
    states = basis.members[pair[0]]
    raised = np.zeros((len(basis.members[pair[1]]), vectors_b.shape[1]))
    for spin in spins:
        reached, amplitude = basis.raised(states, spin)
        found = np.flatnonzero(amplitude)
        raised[basis.position[reached[found]]] += amplitude[found, None] * vectors_b[found]
    return np.asarray(vectors_a.T @ raised)
