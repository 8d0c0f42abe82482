"""What a table of shots will give, before anything is measured.

For amounts x with a Gaussian prior of covariance Γ and noise known from the instrument, the error
covariance of the best linear estimate is

    C = ½ (G + ½ Γ⁻¹)⁻¹,          C₀ = ½ G⁻¹  without the prior,

block by block over object frequency κ' (½ because the unknown is real, see `recon.forward.blocks`).
The variance of a voxel is the mean of the diagonal of C over κ'; it is the same everywhere in a
plane. Source: Kay, Fundamentals of Statistical Signal Processing: Estimation Theory (1993).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.errors import InputError
from recon.forward import BlockQuadratic, ForwardModel, ForwardOperator, Statistics
from recon.forward.block_matrix import BlockMatrix
from recon.forward.grouped import GroupedStatistics, data_term
from recon.forward.normal import normal_blocks
from recon.grid import Grid
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.specimen import Species

FloatArray = NDArray[np.floating]
ComplexArray = NDArray[np.complexfloating]

DETECTION = 3.3
"""Detection limit over standard error (ICH Q2(R1), Validation of Analytical Procedures)."""
NOTHING = 1e-6
"""Information of the shots over that of the expectation, below which rounding hides it."""
SINGULAR = 1e-6
"""Eigenvalues of G below this share of the largest are not known from single precision."""


@dataclass(frozen=True)
class Expectation:
    """What is expected of the specimen's species before it is measured.

    Attributes
    ----------
    spread_mM
        Standard deviation of each species' amount over voxels, (species,), mM.
    feature_um
        Size of the structure: lateral spectrum ∝ 1/(1 + (κ · feature/2)²)^{3/2}, the exponential
        covariance.
    axial_feature_um
        The same along z: covariance exp(−2|z − z'|/feature); 0 for independent planes.
    """

    spread_mM: tuple[float, ...]  # noqa: N815
    feature_um: float = 10.0
    axial_feature_um: float = 0.0

    def __post_init__(self) -> None:
        if not self.spread_mM or not min(self.spread_mM) > 0:
            raise InputError("spread_mM needs positive numbers", "expectation")
        if not self.feature_um > 0:
            raise InputError("feature_um must be positive", "expectation")
        if not self.axial_feature_um >= 0:
            raise InputError("axial_feature_um must not be negative", "expectation")

    def spectrum(self, grid: Grid) -> FloatArray:
        """Shape of the lateral spectrum, mean 1 over the lattice, (ny, nx), FFT order."""
        _, ny, nx = grid.shape
        step_y, step_x = grid.lattice_step
        wave_y = np.fft.fftfreq(ny, 1 / ny) * step_y
        wave_x = np.fft.fftfreq(nx, 1 / nx) * step_x
        squared = wave_y[:, None] ** 2 + wave_x**2
        shape = (1 + squared * (self.feature_um * 0.5e-6) ** 2) ** -1.5
        return shape / shape.mean()

    def axial_covariance(self, grid: Grid) -> FloatArray:
        """Between planes, unit diagonal, (nz, nz)."""
        heights = grid.heights
        if self.axial_feature_um == 0:
            return np.eye(len(heights))
        distance = np.abs(heights[:, None] - heights)
        return np.exp(-2 * distance / (self.axial_feature_um * 1e-6))

    def axial_precision(self, grid: Grid, size: int) -> FloatArray:
        """Its inverse, once for every component and alias of a block, (size, size)."""
        inverse = np.linalg.inv(self.axial_covariance(grid))
        return np.kron(np.eye(size // grid.shape[0]), inverse)


@dataclass(frozen=True, eq=False)
class Experiment:
    """Instrument, grid, species and what is expected of them.

    Attributes
    ----------
    noise_gain
        Factor by which the readout's noise falls (repeated ancilla readout).
    """

    instrument: Instrument
    grid: Grid
    species: tuple[Species, ...]
    expectation: Expectation
    noise_gain: float = 1.0

    def __post_init__(self) -> None:
        if len(self.expectation.spread_mM) != len(self.species):
            raise InputError(
                f"{len(self.expectation.spread_mM)} spreads for {len(self.species)} species",
                "expectation",
            )
        if not self.noise_gain > 0:
            raise InputError("noise_gain must be positive", "experiment")

    def model(self, protocol: Protocol, basis: ComplexArray | None = None) -> ForwardModel:
        """The forward model of a table of shots."""
        if basis is None:
            basis = species_basis(self.species, self.instrument, protocol)
        noise = self.instrument.field_noise / self.noise_gain
        return ForwardModel.build(self.grid, self.instrument, protocol, basis, noise)


@dataclass(frozen=True, eq=False)
class Bound:
    """The bound of one table of shots."""

    experiment: Experiment
    quadratic: BlockQuadratic

    @classmethod
    def of(
        cls, experiment: Experiment, protocol: Protocol, basis: ComplexArray | None = None
    ) -> Bound:
        """Gather the blocks of a table of shots; `basis` replaces the species' own decays."""
        unit = np.asarray(experiment.expectation.spread_mM, float)
        evolutions, group = protocol.evolutions
        empty = np.zeros((len(unit), *experiment.grid.shape), np.complex64)
        normals, grams = [], []
        for place, evolution in enumerate(evolutions):
            shots = protocol.subset(group == place)
            phi = basis
            if phi is None:
                phi = species_basis(
                    experiment.species, experiment.instrument, protocol, float(evolution)
                )
            layout, normal = normal_blocks(ForwardOperator(experiment.model(shots, phi)))
            normals.append(normal)
            grams.append(phi.conj().T @ phi)
        statistics: Statistics | GroupedStatistics
        if len(normals) == 1:
            statistics = Statistics(experiment.grid, layout, empty, normals[0], grams[0], 0.0, 1)
        else:
            statistics = GroupedStatistics(
                experiment.grid, layout, empty, tuple(normals), tuple(grams), 0.0, 1
            )
        return cls(experiment, data_term(statistics.scaled(unit), real=True))

    @property
    def unit(self) -> FloatArray:
        """mM per scaled unit, (species,)."""
        return np.asarray(self.experiment.expectation.spread_mM, float)

    @cached_property
    def prior(self) -> FloatArray:
        """½ over the spectrum, in scaled units, in block order (q, blocks).

        ½ Γ⁻¹ is this times the inverse covariance between planes.
        """
        plane = 0.5 / self.experiment.expectation.spectrum(self.experiment.grid)
        return self.quadratic.spread_plane(plane)

    @cached_property
    def _posterior(self) -> ComplexArray:
        """(G + ½ Γ⁻¹)⁻¹, (groups, blocks, q, q), double precision."""
        return np.linalg.inv(self._with_prior())

    def _with_prior(self, gain: float = 1.0) -> ComplexArray:
        matrix: ComplexArray = self.quadratic.matrix.per_block.astype(complex)
        matrix *= gain**2
        expectation, grid = self.experiment.expectation, self.experiment.grid
        matrix += self.prior.T[:, :, None] * expectation.axial_precision(grid, matrix.shape[-1])
        return matrix

    def standard_error(self, gain: float = 1.0) -> FloatArray:
        """With the prior, (species, nz), mM; `gain` times the signal-to-noise."""
        posterior = self._posterior if gain == 1 else np.linalg.inv(self._with_prior(gain))
        variance = 0.5 * self.quadratic.plane_mean(posterior)
        return np.sqrt(np.maximum(variance, 0)) * self.unit[:, None]

    def standard_error_without_prior(self) -> FloatArray:
        """Of unbiased least squares, (species, nz), mM; infinite where G is singular."""
        values, vectors = np.linalg.eigh(self.quadratic.matrix.per_block.astype(complex))
        known = values > SINGULAR * values.max()
        inverse = np.where(known, 1 / np.where(known, values, 1), np.inf)
        weight = np.abs(vectors) ** 2
        with np.errstate(invalid="ignore"):
            parts = np.where(weight > 1e-9, weight * inverse[..., None, :], 0)
        variance = 0.5 * self.quadratic.plane_mean_of_diagonal(parts.sum(axis=-1))
        return np.sqrt(variance) * self.unit[:, None]

    def error_of_shots(self, gain: float = 1.0) -> FloatArray:
        """What the shots add to the expectation, as an error of their own, (species, nz), mM.

        1/√(1/variance − 1/variance before), as of two independent sources (Kay 1993): it is not
        small only because the expectation is narrow.
        """
        after, before = 1 / self.standard_error(gain) ** 2, 1 / self.unit[:, None] ** 2
        return 1 / np.sqrt(np.maximum(after - before, NOTHING * before))

    def detection_limit(self, gain: float = 1.0) -> FloatArray:
        """3.3 errors of the shots, (species, nz), mM."""
        return DETECTION * self.error_of_shots(gain)

    def condition(self) -> FloatArray:
        """Condition number of every block of G, (groups, blocks)."""
        values = np.maximum(self.quadratic.spectrum[0], 0)
        with np.errstate(divide="ignore"):
            return values[..., -1] / values[..., 0]

    def sensitivity(self, species: int = 0) -> tuple[FloatArray, FloatArray]:
        """Lateral wavenumber κ (K,) in rad/m, and what the shots tell of each depth, (nz, K).

        √(1/variance − 1/variance before), 1/mM, means over rings of κ: the inverse error that the
        shots alone give an amplitude, the other depths and species being unknown.

        Raises
        ------
        InputError
            Camera pixels span several voxels: frequencies then share blocks.
        """
        if self.quadratic.layout.aliases != (1, 1):
            raise InputError("needs one channel per voxel", "sensitivity")
        nz = self.experiment.grid.shape[0]
        diagonal = np.einsum("gkqq->gkq", self._posterior).real
        if self.quadratic._mix is not None:
            shares = np.abs(self.quadratic._mix[species]) ** 2
            diagonal = np.tensordot(shares, diagonal, 1)
        else:
            diagonal = diagonal[0][:, species * nz : (species + 1) * nz]
        before = self.prior[:nz].T
        told = np.maximum(1 / diagonal - before, 0) * 2 / self.unit[species] ** 2
        return self._rings(np.sqrt(told))

    def resolution(self, species: int = 0) -> FloatArray:
        """Width (FWHM) of the point response along (z, y, x) per depth, (nz, 3), metres.

        The response (G + ½Γ⁻¹)⁻¹ G of a point in the voxel's plane; a width below one voxel is
        given as one voxel.
        """
        nz, ny, nx = self.experiment.grid.shape
        inverse = BlockMatrix(self._posterior.transpose(0, 2, 3, 1), self.quadratic.matrix.batch)
        response = np.empty((nz, nz, ny, nx))
        for z in range(nz):
            point = np.zeros(self.quadratic.shape, self.quadratic.dtype)
            point[species, z, 0, 0] = 1
            seen = self.quadratic.filtered(inverse, self.quadratic.normal(point))
            response[z] = seen[species]
        edges = self.experiment.grid.voxel
        widths = np.empty((nz, 3))
        for z in range(nz):
            one = response[z]
            widths[z, 0] = full_width(one[:, 0, 0], z) * edges[0]
            widths[z, 1] = full_width(np.roll(one[z, :, 0], ny // 2), ny // 2) * edges[1]
            widths[z, 2] = full_width(np.roll(one[z, 0], nx // 2), nx // 2) * edges[2]
        return widths

    def _rings(self, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Means over rings of half-plane blocks (blocks, nz)."""
        grid = self.experiment.grid
        ny = grid.shape[1]
        step_y, step_x = grid.lattice_step
        columns = values.shape[0] // ny
        wave = np.hypot(
            (np.fft.fftfreq(ny, 1 / ny) * step_y)[:, None], np.arange(columns) * step_x
        ).ravel()
        step = max(step_y, step_x)
        ring = np.rint(wave / step).astype(int)
        count = np.bincount(ring)
        means = np.stack([np.bincount(ring, one) for one in values.T]) / np.maximum(count, 1)
        kept = (count > 0) & (np.arange(len(count)) > 0)
        return np.arange(len(count))[kept] * step, means[:, kept]


def full_width(profile: FloatArray, centre: int) -> float:
    """Full width at half maximum about an index, in samples, by linear interpolation; at least 1.

    A side that never falls to half the value at the centre ends at the profile's edge.
    """
    half = 0.5 * profile[centre]
    if not half > 0:
        return float("nan")
    total = 0.0
    for side in (profile[centre:], profile[centre::-1]):
        below = np.flatnonzero(side < half)
        if below.size:
            last = int(below[0])
            share = (side[last - 1] - half) / (side[last - 1] - side[last])
            total += last - 1 + float(share)
        else:
            total += len(side) - 0.5
    return max(total, 1.0)
