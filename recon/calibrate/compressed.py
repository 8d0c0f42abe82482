"""A record with its time axis reduced to what known species can put there.

With Φ_j = U_j C_j (U_j orthonormal columns) the images U_jᴴ y_j hold everything that the species
say; the rest of y_j is noise whose energy is kept for the misfit.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.errors import InputError
from recon.grid import Grid
from recon.protocol import Protocol
from recon.record import Record
from recon.specimen import Species

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
Progress = Callable[[int, int], None]

EDGE = 0.9
"""Share of the grid's Nyquist wavenumber for nominal wavevectors: true ones may be longer."""


@dataclass(frozen=True, eq=False)
class Compressed:
    """Images of each shot in an orthonormal basis of the time axis.

    Attributes
    ----------
    protocol
        The shots that are kept.
    samples
        (shots, components, channels y, channels x), strongest component first.
    mixing
        C_j, (shots, components, species): a unit of each species in the components.
    weight
        Inverse noise variance, (shots,), 1/T².
    rest, rest_count
        Weighted energy and number of the samples outside the basis.
    """

    record: Record
    protocol: Protocol
    samples: ComplexArray
    mixing: ComplexArray
    weight: FloatArray
    rest: float
    rest_count: int

    def __len__(self) -> int:
        return len(self.samples)

    @property
    def energy(self) -> float:
        """Weighted energy of the images, dimensionless."""
        power = (np.abs(self.samples) ** 2).sum(axis=(1, 2, 3), dtype=float)
        return float(power @ self.weight)

    def subset(self, shots: NDArray[np.integer]) -> Compressed:
        """Some of the shots; the rest is left behind."""
        return replace(
            self,
            protocol=self.protocol.subset(shots),
            samples=self.samples[shots],
            mixing=self.mixing[shots],
            weight=self.weight[shots],
            rest=0.0,
            rest_count=0,
        )

    def strongest(self, components: int) -> Compressed:
        """The first components only; the rest is left behind."""
        return replace(
            self,
            samples=self.samples[:, :components],
            mixing=self.mixing[:, :components],
            rest=0.0,
            rest_count=0,
        )


def compress(
    record: Record,
    shots: NDArray[np.integer] | None = None,
    *,
    species: Sequence[Species] = (),
) -> Compressed:
    """Read the record once and reduce its time axis.

    Parameters
    ----------
    shots
        Numbers of the shots to keep, ascending; all by default.
    species
        Those that can be there; by default the record's.

    Raises
    ------
    InputError
        A shot does not exist, or the record does not say what it was taken of.
    """
    shots = np.arange(len(record)) if shots is None else np.asarray(shots)
    if not len(shots) or shots.min() < 0 or shots.max() >= len(record):
        raise InputError(
            f"shots to use must be among 0 to {len(record) - 1}", record.where, "pick others"
        )
    wanted = np.zeros(len(record), bool)
    wanted[shots] = True
    group = record.protocol.evolutions[1]
    bases = _bases(record, species or record.specimen.species)
    images, rest = [], 0.0
    for where, block in record.shots():
        for shot, samples in zip(range(where.start, where.stop), block, strict=True):
            if wanted[shot]:
                basis = bases[group[shot]][0].astype(np.complex64)
                image = np.tensordot(basis.conj().T, samples, 1)
                images.append(image)
                left = np.linalg.norm(samples) ** 2 - np.linalg.norm(image) ** 2
                rest += float(left * record.weights[shot])
    held = np.stack(images)
    mixing = np.stack([values[:, None] * right for _, values, right in bases])[group[wanted]]
    outside = len(record.protocol.sample_times) - held.shape[1]
    count = len(held) * outside * int(np.prod(held.shape[2:]))
    protocol = record.protocol.subset(np.flatnonzero(wanted))
    return Compressed(record, protocol, held, mixing, record.weights[wanted], rest, count)


def _bases(
    record: Record, species: Sequence[Species]
) -> list[tuple[ComplexArray, FloatArray, ComplexArray]]:
    """U, singular values, and the rest of Φ for every evolution time."""
    instrument, protocol = record.instrument, record.protocol
    return [
        np.linalg.svd(
            species_basis(species, instrument, protocol, float(evolution)), full_matrices=False
        )
        for evolution in protocol.evolutions[0]
    ]


def inside(protocol: Protocol, grid: Grid, edge: float = EDGE) -> NDArray[np.integer]:
    """Shots whose wavevectors leave room to the grid's Nyquist wavenumber.

    Raises
    ------
    InputError
        There is none.
    """
    limit = edge * np.pi / np.array(grid.voxel[:0:-1])
    kept = np.flatnonzero((np.abs(protocol.nuclear_wavevector[:, :2]) <= limit).all(axis=1))
    if not kept.size:
        raise InputError(
            "every nuclear wavevector is close to the grid's Nyquist wavenumber",
            "calibration",
            "use smaller voxels",
        )
    return kept
