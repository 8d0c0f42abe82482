"""What is solved for: amounts of known species, or the complex cube over time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol as Interface

import numpy as np
from numpy.typing import NDArray

from recon.band import warn_of_folds
from recon.basis import all_times, species_basis, time_basis
from recon.errors import InputError
from recon.forward import Statistics
from recon.forward.diffusing import JointStatistics
from recon.forward.diffusing_model import DiffusingModel
from recon.forward.grouped import GroupedStatistics
from recon.record import Record
from recon.result import Account, Cube, Result, SpeciesMaps
from recon.separability import Separability
from recon.solvers.estimate import Estimate
from recon.specimen import Species
from recon.spreading import Spreading, warn_if_lost

ComplexArray = NDArray[np.complexfloating]
AnyStatistics = Statistics | GroupedStatistics | JointStatistics


class Unknown(Interface):
    """The object's components, and how samples depend on them.

    Attributes
    ----------
    real
        Amounts are real, a cube of magnetisation is complex.
    """

    @property
    def real(self) -> bool: ...

    def basis(self, record: Record, evolution: float = 0.0) -> ComplexArray:
        """Φ (times, components), A/m per unit of each component, of shots that evolve so long."""

    def diffusing(self, record: Record) -> DiffusingModel | None:
        """The model in which patterns diffuse away while they are listened to, if wanted."""

    def check(self, record: Record, statistics: AnyStatistics | None) -> None:
        """Warn of what this record's spectral axis cannot tell; no statistics in a reality."""

    def components(self, record: Record) -> int:
        """How many components are solved for, at most."""

    def compressed(self, statistics: AnyStatistics) -> tuple[AnyStatistics, ComplexArray | None]:
        """Fewer components where the unknown allows it, and the matrix that expands them."""

    def result(
        self, record: Record, estimate: Estimate, expand: ComplexArray | None, account: Account
    ) -> Result:
        """The estimate as maps or as a cube."""


@dataclass(frozen=True)
class SpeciesAmounts:
    """Amounts in mM of species with known lines; by default those of the record's specimen.

    Attributes
    ----------
    species
        Those to solve for.
    spreading
        What diffusion does to wound patterns, `FreeDiffusion()` or `StandingMap()`; None for
        molecules that stand still.
    """

    species: tuple[Species, ...] = ()
    real: bool = True
    spreading: Spreading | None = None

    def basis(self, record: Record, evolution: float = 0.0) -> ComplexArray:
        return species_basis(self._species(record), record.instrument, record.protocol, evolution)

    def diffusing(self, record: Record) -> DiffusingModel | None:
        if self.spreading is None:
            return None
        return DiffusingModel.build(
            record.specimen.grid,
            record.instrument,
            record.protocol,
            self._species(record),
            record.noise_sd,
            self.spreading,
        )

    def check(self, record: Record, statistics: AnyStatistics | None) -> None:
        species = self._species(record)
        if self.spreading is None:
            warn_if_lost(record.protocol, species, "give the amounts a spreading")
        warn_of_folds(species, record.instrument, record.protocol)
        if statistics is not None and len(species) > 1:
            names = tuple(one.name for one in species)
            # a real amount meets half of the noise
            Separability(names, 2 * statistics.spectral_gram()).warn()

    def components(self, record: Record) -> int:
        return len(self._species(record))

    def compressed(self, statistics: AnyStatistics) -> tuple[AnyStatistics, ComplexArray | None]:
        return statistics, None

    def result(
        self, record: Record, estimate: Estimate, expand: ComplexArray | None, account: Account
    ) -> SpeciesMaps:
        return SpeciesMaps(
            grid=record.specimen.grid,
            values=estimate.x.astype(np.float32, copy=False),
            standard_error=estimate.standard_error,
            resolution=estimate.resolution,
            account=account,
            names=tuple(one.name for one in self._species(record)),
        )

    def _species(self, record: Record) -> Sequence[Species]:
        return self.species or record.specimen.species


@dataclass(frozen=True)
class ComplexCube:
    """Magnetisation in A/m at every sample time, without a line list.

    The time axis is first compressed to the leading left singular vectors of b: those that stand
    above the noise (Marchenko & Pastur's edge; Math. USSR Sbornik 1:457, 1967). Where shots have
    different evolution times every time is kept.

    Attributes
    ----------
    vectors
        Number of singular vectors to keep; None counts those above the noise, 0 keeps every time.
    """

    vectors: int | None = None
    real: bool = False

    def basis(self, record: Record, evolution: float = 0.0) -> ComplexArray:
        return time_basis(record.protocol, evolution)

    def diffusing(self, record: Record) -> DiffusingModel | None:
        return None

    def check(self, record: Record, statistics: AnyStatistics | None) -> None:
        species = record.specimen.species
        mend = "a cube cannot follow it; solve for amounts, or evolve before encoding"
        warn_if_lost(record.protocol, species, mend)
        warn_of_folds(species, record.instrument, record.protocol)

    def components(self, record: Record) -> int:
        times = len(all_times(record.protocol))
        return min(self.vectors or times, times)

    def compressed(self, statistics: AnyStatistics) -> tuple[AnyStatistics, ComplexArray | None]:
        if self.vectors == 0 or not isinstance(statistics, Statistics):
            return statistics, None
        count = len(statistics.linear)
        b = statistics.linear.reshape(count, -1)
        noise = _noise_power(statistics)
        scale = np.prod(statistics.grid.shape[1:])
        values, vectors = np.linalg.eigh((b @ b.conj().T).astype(complex) / scale)
        order = np.argsort(values)[::-1]
        if self.vectors is None:
            edge = noise * (1 + np.sqrt(count / _independent(statistics))) ** 2
            keep = max(1, int(np.sum(values > edge)))
        else:
            keep = min(self.vectors, count)
        expand = vectors[:, order[:keep]]
        return statistics.projected(expand), expand

    def result(
        self, record: Record, estimate: Estimate, expand: ComplexArray | None, account: Account
    ) -> Cube:
        x, error, width = estimate.x, estimate.standard_error, estimate.resolution
        if expand is not None:
            x = np.tensordot(expand.astype(np.complex64), x, 1)
            if width is not None:
                power = np.abs(expand.astype(np.complex64)) ** 2
                with np.errstate(invalid="ignore"):  # widths may be infinite: undefined
                    width = np.tensordot(power / power.sum(axis=1, keepdims=True), width, 1)
            if error is not None:
                error = np.sqrt(np.tensordot(np.abs(expand.astype(np.complex64)) ** 2, error**2, 1))
        return Cube(
            grid=record.specimen.grid,
            values=x.astype(np.complex64, copy=False),
            standard_error=error,
            resolution=width,
            account=account,
            sample_times=all_times(record.protocol),
            larmor_frequency=record.instrument.larmor_frequency,
            reference_shift_ppm=record.protocol.reference_shift_ppm,
        )


def _noise_power(statistics: Statistics) -> float:
    """Expected noise of one row of b, summed over the grid: the trace of G for one time."""
    return float(np.einsum("aayx->", statistics.normal).real)


def _independent(statistics: Statistics) -> float:
    """Number of independent values in one row of b: (tr G)² / tr G²."""
    trace = np.einsum("aayx->", statistics.normal).real
    square = float((np.abs(statistics.normal) ** 2).sum())
    if square == 0:
        raise InputError("no shot sees the object", "protocol", "check axes and wavevectors")
    return float(trace**2 / square)
