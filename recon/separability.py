"""Whether species can be told apart at this field, with these times, at this noise."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from recon.errors import InputError, InputWarning

FloatArray = NDArray[np.float64]

EXPECTED_MM = 10.0
"""An amount that is worth telling apart, mM, where nothing else is known."""

CONFUSED = 3.0
"""Growth of a standard error by the presence of other species that is worth a warning."""


@dataclass(frozen=True, eq=False)
class Separability:
    """The Gram matrix of species and what it allows.

    Attributes
    ----------
    names
        Of the species.
    gram
        Hermitian, (species, species), of the signals of 1 mM in units of the noise; amounts are
        real, so only its real part counts.
    """

    names: tuple[str, ...]
    gram: NDArray[np.complexfloating]

    def __post_init__(self) -> None:
        if self.gram.shape != (len(self.names),) * 2:
            raise InputError(f"Gram matrix {self.gram.shape} of {len(self.names)} species", "basis")
        if not (np.diag(self.gram).real > 0).all():
            blind = self.names[int(np.argmin(np.diag(self.gram).real))]
            raise InputError(f"{blind} leaves no signal", "basis", "check sample times and decay")

    @classmethod
    def of_basis(
        cls, names: Sequence[str], basis: NDArray[np.complexfloating], noise: ArrayLike = 1.0
    ) -> Separability:
        """From signals (samples, species) per mM; `noise` is σ of a complex sample or of each.

        σ² = E|n|², of which a real amount meets half: the bound is (2 Re ΦᴴΦ/σ²)⁻¹.
        """
        scaled = basis * (np.sqrt(2) / np.broadcast_to(noise, len(basis)))[:, None]
        return cls(tuple(names), scaled.conj().T @ scaled)

    @property
    def correlation(self) -> FloatArray:
        """Cosines between the signals of any two species, (species, species)."""
        real = np.asarray(self.gram.real, float)
        size = np.sqrt(np.diag(real))
        return np.asarray(real / np.outer(size, size))

    @property
    def condition(self) -> float:
        """Condition number of the Gram matrix of unit signals: `correlation`."""
        values = np.linalg.eigvalsh(self.correlation)
        return float(values[-1] / values[0]) if values[0] > 1e-15 * values[-1] else np.inf

    @property
    def worst_pair(self) -> tuple[str, str]:
        """The two species whose signals are most alike.

        Raises
        ------
        InputError
            There is only one species.
        """
        if len(self.names) < 2:
            raise InputError("one species has no pair", "basis")
        alike = np.abs(self.correlation)
        np.fill_diagonal(alike, -1)
        first, second = sorted(divmod(int(alike.argmax()), len(alike)))
        return self.names[first], self.names[second]

    @property
    def confusion(self) -> FloatArray:
        """How many times the others' presence enlarges each standard error, (species,), from 1.

        √[(C⁻¹)_ss] with C the correlation: the variance inflation factor's root.
        """
        values, vectors = np.linalg.eigh(self.correlation)
        inverse = 1 / np.maximum(values, 1e-15 * values[-1])
        return np.asarray(np.sqrt((vectors**2) @ inverse))

    @property
    def standard_error(self) -> FloatArray:
        """Cramér–Rao bound of each amount, all others unknown too, (species,), mM."""
        return np.asarray(self.confusion / np.sqrt(np.diag(self.gram).real))

    def confused(self, expected: ArrayLike = EXPECTED_MM) -> list[str]:
        """Species that are lost among the others: their bound exceeds `expected`, mM, for that."""
        lost = (self.confusion > CONFUSED) & (self.standard_error > np.asarray(expected))
        return [name for name, is_lost in zip(self.names, lost, strict=True) if is_lost]

    def warn(self, expected: ArrayLike = EXPECTED_MM) -> None:
        """Name the worst pair and the condition number if species are lost among each other."""
        lost = self.confused(expected)
        if not lost:
            return
        first, second = self.worst_pair
        error = self.standard_error[[self.names.index(name) for name in lost]]
        bounds = ", ".join(f"{n} {e:.2g} mM" for n, e in zip(lost, error, strict=True))
        warnings.warn(
            f"{first} and {second} cannot be told apart at this field and noise: condition number "
            f"{self.condition:.2g}, standard errors of a voxel {bounds}; raise the field, listen "
            "longer, or solve for their sum",
            InputWarning,
            stacklevel=3,
        )
