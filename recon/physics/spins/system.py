"""A molecule's spins: shifts, couplings and magnetically equivalent groups.

One *spin* of a `SpinSystem` is a group of `counts` magnetically equivalent nuclei of spin ½ (one
shift, one coupling to every partner); couplings inside such a group are never seen, so they are
not given. Nuclei that are only chemically equivalent (AA'BB') are listed one by one.

In hertz, relative to the reference shift and in the frame that rotates with each nucleus,

    H = −Σ_k ν_k I_kz + Σ_{k<l} J_kl I_k·I_l (same nucleus) or J_kl I_kz I_lz (unlike nuclei),
    ν_k = (δ_k − δ_ref) · 1e-6 · f_k,

f_k the Larmor frequency of the nucleus, negative where γ is negative. δ_ref holds for protons;
other nuclei count from 0 ppm.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, field
from itertools import combinations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse.csgraph import connected_components

from recon.errors import InputError, InputWarning

FloatArray = NDArray[np.float64]

PROTON = "1H"

FREQUENCY_RATIO: dict[str, float] = {
    "1H": 1.0,
    "13C": 0.25145020,
    "15N": -0.10136767,
    "19F": 0.94094011,
    "31P": 0.40480742,
}
"""Larmor frequency over the proton's, signed as γ (from memory, after the IUPAC table,
Harris et al., Pure Appl. Chem. 73:1795 (2001))."""

LARGEST_DIMENSION = 2**12
"""States of the largest coupled group that is accepted: twelve spins ½."""

SECOND_ORDER_TOLERANCE_HZ = 1e-3
"""Largest second-order shift J²/(2|f_k − f_l|) of unlike nuclei that passes without a warning."""


@dataclass(frozen=True, eq=False)
class SpinSystem:
    """Spins ½ with shifts and couplings.

    Attributes
    ----------
    names
        One name per spin (a spin may stand for several equivalent nuclei), all different.
    shifts_ppm
        Chemical shifts, (K,), ppm.
    couplings
        Scalar couplings, (K, K), Hz, symmetric with a zero diagonal.
    counts
        Magnetically equivalent nuclei behind each spin, (K,); one each if not given.
    nuclei
        "1H", "13C", "15N", "19F" or "31P" for each spin; protons if not given.
    decay_times
        Transverse decay time of each spin, (K,), seconds; infinite if not given.

    Raises
    ------
    InputError
        Wrong lengths, NaN, an unsymmetric coupling table, an unknown nucleus, no proton at all, or
        a coupled group of more than twelve spins ½ (after equivalent ones are joined).
    """

    names: tuple[str, ...]
    shifts_ppm: FloatArray
    couplings: FloatArray
    counts: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    nuclei: tuple[str, ...] = ()
    decay_times: FloatArray = field(default_factory=lambda: np.zeros(0))

    def __post_init__(self) -> None:
        spins = len(self.names)
        counts = self.counts if np.size(self.counts) else np.ones(spins, int)
        times = self.decay_times if np.size(self.decay_times) else np.full(spins, np.inf)
        fill = {
            "shifts_ppm": _vector(self.shifts_ppm, spins, "shifts"),
            "counts": _counts(counts, self.names),
            "nuclei": tuple(self.nuclei) or (PROTON,) * spins,
            "decay_times": _decay_times(times, self.names),
            "couplings": symmetric_couplings(self.couplings, self.names),
        }
        for name, value in fill.items():
            object.__setattr__(self, name, value)
        _check_nuclei(self.nuclei, self.names)
        for group in self.coupled_groups():
            _check_size(self.counts[group], [self.names[k] for k in group])

    @property
    def protons(self) -> int:
        """Number of protons, the sum of all intensities of the proton spectrum."""
        return int(self.counts[np.array(self.nuclei) == PROTON].sum())

    @property
    def like_nuclei(self) -> NDArray[np.bool_]:
        """Which pairs of spins are of the same nucleus, (K, K)."""
        nuclei = np.array(self.nuclei)
        return np.asarray(nuclei[:, None] == nuclei[None, :])

    def frequencies(self, larmor_frequency: float, reference_shift_ppm: float) -> FloatArray:
        """ν_k in Hz, (K,), at the proton Larmor frequency `larmor_frequency` in Hz."""
        ratio = np.array([FREQUENCY_RATIO[nucleus] for nucleus in self.nuclei])
        zero = np.where(np.array(self.nuclei) == PROTON, reference_shift_ppm, 0.0)
        return np.asarray((self.shifts_ppm - zero) * 1e-6 * ratio * larmor_frequency)

    def coupled_groups(self) -> list[list[int]]:
        """Indices of spins that couplings of any kind hold together, one list per group."""
        return _components(self.couplings)

    def observed(self, spins: list[int]) -> bool:
        """Whether there is a proton among some spins."""
        return any(self.nuclei[k] == PROTON for k in spins)

    def part(self, spins: list[int]) -> SpinSystem:
        """The system of some spins only, couplings to the others left out."""
        return SpinSystem(
            tuple(self.names[k] for k in spins),
            self.shifts_ppm[spins],
            self.couplings[np.ix_(spins, spins)],
            self.counts[spins],
            tuple(self.nuclei[k] for k in spins),
            self.decay_times[spins],
        )

    def flip_flop_groups(self) -> list[list[int]]:
        """Indices of spins that couplings between like nuclei hold together.

        Such a group exchanges magnetisation only within itself: its total Fz is conserved.
        """
        return _components(np.where(self.like_nuclei, self.couplings, 0.0))

    def check_weak_coupling(self, larmor_frequency: float) -> None:
        """Warn when J between unlike nuclei shifts lines to second order, J²/(2|f_k − f_l|).

        Raises
        ------
        InputError
            The field is zero, where unlike nuclei are not weakly coupled at all.
        """
        unlike = np.triu(~self.like_nuclei & (self.couplings != 0))
        for k, l in zip(*np.nonzero(unlike), strict=True):  # noqa: E741
            ratios = FREQUENCY_RATIO[self.nuclei[k]] - FREQUENCY_RATIO[self.nuclei[l]]
            coupling, pair = self.couplings[k, l], f"spins {self.names[k]}, {self.names[l]}"
            if larmor_frequency == 0:
                raise InputError(
                    "unlike nuclei are not weakly coupled at zero field", pair, "raise the field"
                )
            shift = coupling**2 / abs(2 * ratios * larmor_frequency)
            if shift > SECOND_ORDER_TOLERANCE_HZ:
                warnings.warn(
                    f"{pair}: J = {coupling:g} Hz is taken as weak coupling, but shifts lines "
                    f"by {shift:.2g} Hz at a proton frequency of {larmor_frequency:g} Hz",
                    InputWarning,
                    stacklevel=3,
                )


def symmetric_couplings(couplings: ArrayLike, names: tuple[str, ...]) -> FloatArray:
    """The coupling table as an array, (K, K), Hz, if it is square, finite and symmetric.

    Raises
    ------
    InputError
        Naming the first pair whose two entries differ, or the first spin coupled to itself.
    """
    table = np.array(couplings, dtype=np.float64)
    if table.shape != (len(names), len(names)):
        raise InputError(f"has shape {table.shape} for {len(names)} spins", "coupling table")
    for (k, first), (l, second) in combinations(enumerate(names), 2):  # noqa: E741
        there, back = table[k, l], table[l, k]
        if not there == back:
            raise InputError(
                f"not symmetric: {first}–{second} is {there:g} Hz, {second}–{first} {back:g} Hz",
                "coupling table",
                "give one finite value per pair",
            )
    for k, name in enumerate(names):
        if table[k, k] != 0:
            raise InputError(
                f"spin {name} is coupled to itself",
                "coupling table",
                "leave out J within equivalent nuclei: it is never seen",
            )
    if not np.isfinite(table).all():
        raise InputError("holds infinite values", "coupling table")
    return table


def _components(couplings: FloatArray) -> list[list[int]]:
    count, label = connected_components(couplings != 0, directed=False)
    return [np.flatnonzero(label == group).tolist() for group in range(count)]


def _vector(values: ArrayLike, length: int, what: str) -> FloatArray:
    vector = np.array(values, dtype=np.float64)
    if length == 0 or vector.shape != (length,):
        raise InputError(f"{vector.size} {what} for {length} names", "spin system")
    if not np.isfinite(vector).all():
        raise InputError(f"{what} must be finite, got {vector.tolist()}", "spin system")
    return vector


def _counts(values: ArrayLike, names: tuple[str, ...]) -> NDArray[np.int64]:
    vector = _vector(values, len(names), "counts")
    if vector.min() < 1 or (vector != np.round(vector)).any():
        raise InputError(f"counts {vector.tolist()} must be whole, 1 or more", "spin system")
    return vector.astype(np.int64)


def _decay_times(values: ArrayLike, names: tuple[str, ...]) -> FloatArray:
    times = np.array(values, dtype=np.float64)
    if times.shape != (len(names),) or not (times > 0).all():
        raise InputError(f"{times.tolist()} must be one positive time per spin", "decay times")
    return times


def _check_nuclei(nuclei: tuple[str, ...], names: tuple[str, ...]) -> None:
    if len(set(names)) < len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise InputError(f"the name {twice} is used twice", "spin system")
    if len(nuclei) != len(names):
        raise InputError(f"{len(nuclei)} nuclei for {len(names)} names", "spin system")
    for name, nucleus in zip(names, nuclei, strict=True):
        if nucleus not in FREQUENCY_RATIO:
            known = ", ".join(FREQUENCY_RATIO)
            raise InputError(f"unknown nucleus {nucleus}", f"spin {name}", f"use one of {known}")
    if PROTON not in nuclei:
        raise InputError("has no proton to observe", "spin system")


def _check_size(counts: NDArray[np.int64], names: list[str]) -> None:
    if len(names) > 1 and np.prod(counts + 1.0) > LARGEST_DIMENSION:
        raise InputError(
            f"{np.prod(counts + 1.0):.0f} states are more than {LARGEST_DIMENSION} (12 spins)",
            f"coupled spins {', '.join(names)}",
            "leave out the weakest couplings or join equivalent spins",
        )
