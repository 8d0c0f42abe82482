"""What the shots say of each other: amplitude, phase and frequency of every shot.

The shots share one object. With x marginalised under a Gaussian prior of variance 1/Λ,

    −log p(y|θ) = ‖W^{1/2}(y − A(θ) x̂)‖² + x̂ᵀΛx̂ + ½ log det(Re G(θ) + Λ),   x̂ its minimiser,

is minimised over θ = (ln amplitude, phase, frequency) of all shots by Newton's method with the
projected Hessian J ᵀ(1 − A(G + Λ)⁻¹Aᴴ) J (Kaufman, BIT 15:49, 1975; MacKay, Neural Computation
4:415, 1992, for the marginal likelihood). A common amplitude is not told apart from the object's
and stays as it is. The standard errors are those of the inverse Hessian.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward import ForwardModel, ForwardOperator
from recon.forward.grouped import data_term
from recon.forward.statistics import Statistics, accumulate
from recon.protocol import Protocol
from recon.reconstruct import unit_sizes
from recon.record import Record
from recon.solvers.estimate import Progress, silent
from recon.solvers.ridge import chosen_weight
from recon.symbol import Symbol
from recon.unknown import SpeciesAmounts

FloatArray = NDArray[np.float64]
TELLING_RAD = 0.5
"""Median standard error of a phase above which shots are said to tell nothing of each other."""

Step = Callable[[NDArray[np.float32]], NDArray[np.float32]]


class UntoldError(InputError):
    """A record does not tell what was asked of it."""


@dataclass(frozen=True)
class ShotConsistency:
    """Settings.

    Attributes
    ----------
    frequency
        Also find each shot's frequency; otherwise amplitude and phase only.
    rounds
        Most Newton steps.
    tolerance
        Steps end when the largest change is below this share of its standard error.
    """

    frequency: bool = False
    rounds: int = 5
    tolerance: float = 0.1

    def __post_init__(self) -> None:
        if self.rounds < 1 or not self.tolerance > 0:
            raise InputError("rounds and tolerance must be positive", "consistency of the shots")


@dataclass(frozen=True, eq=False)
class ShotFactors:
    """Corrections to every shot, (shots,): what the table of shots has to be multiplied by.

    Attributes
    ----------
    log_amplitude, phase_rad, frequency_Hz
        Their mean amplitude is 1; the frequencies are zeros if they were not looked for.
    covariance
        Of all of them, (parts · shots, parts · shots), in that order.
    """

    log_amplitude: FloatArray
    phase_rad: FloatArray
    frequency_Hz: FloatArray  # noqa: N815
    covariance: FloatArray

    def error(self, part: int) -> FloatArray:
        """Standard errors of part 0 (log amplitude), 1 (phase) or 2 (frequency), (shots,)."""
        count = len(self.log_amplitude)
        block = np.diag(self.covariance)[part * count : (part + 1) * count]
        return np.sqrt(np.maximum(block, 0))


def shot_factors(
    record: Record, settings: ShotConsistency | None = None, progress: Progress = silent
) -> ShotFactors:
    """Amplitude, phase and frequency of every shot by what the others say.

    Raises
    ------
    InputError
        The record is too short for its own unknowns, or does not fit the model; `UntoldError` where
        its shots overlap too little.
    """
    settings = settings or ShotConsistency()
    parts, shots = 2 + settings.frequency, len(record)
    if shots < 3:
        raise InputError(f"{shots} shots say nothing of each other", "consistency", "measure more")
    total = np.zeros((parts, shots))
    for number in range(settings.rounds):
        progress("making the shots agree", number / settings.rounds)
        change, covariance = _newton(record, total, settings)
        total += change
        spread = np.sqrt(np.maximum(np.diag(covariance), 1e-30)).reshape(parts, shots)
        if (np.abs(change) / spread).max() < settings.tolerance:
            break
    if not np.median(spread[1]) < TELLING_RAD or np.abs(total[1]).max() > np.pi:
        raise UntoldError(
            f"the shots overlap too little to be compared: phases are known to "
            f"{np.median(spread[1]):.2g} rad",
            "agreement of the shots",
            "leave it out, or measure more shots",
        )
    frequency = total[2] if settings.frequency else np.zeros(shots)
    return ShotFactors(total[0], total[1], frequency, covariance)


def corrected(record: Record, factors: FloatArray) -> Protocol:
    """The record's table with amplitudes multiplied by exp(factors[0] + i factors[1])."""
    return replace(
        record.protocol,
        amplitude=record.protocol.amplitude * np.exp(factors[0] + 1j * factors[1]),
    )


def _newton(
    record: Record, factors: FloatArray, settings: ShotConsistency
) -> tuple[FloatArray, FloatArray]:
    """One step, and the covariance there."""
    view = _View(record, factors)
    problem = _Problem(view)
    parts, shots = factors.shape
    gradient, diagonal = np.zeros((parts, shots)), np.zeros((parts, parts, shots))
    columns = np.empty((parts, shots, problem.unknowns), np.float32)
    for shot in range(shots):
        found = problem.shot(shot, parts)
        gradient[:, shot], diagonal[:, :, shot], columns[:, shot] = found
    flat = columns.reshape(parts * shots, -1)
    solved = np.stack([problem.solve(column) for column in flat])
    hessian = -(flat @ solved.T).astype(float)
    for one in range(parts):
        for other in range(parts):
            place = np.arange(shots)
            hessian[one * shots + place, other * shots + place] += diagonal[one, other]
    hessian = (hessian + hessian.T) / 2
    covariance = _inverse_without_scale(2 * hessian, shots)
    change = covariance @ (2 * gradient.ravel())
    return change.reshape(parts, shots), covariance


def _inverse_without_scale(hessian: FloatArray, shots: int) -> FloatArray:
    """Inverse on the complement of a common amplitude."""
    direction = np.zeros(len(hessian))
    direction[:shots] = 1 / np.sqrt(shots)
    along = np.outer(direction, direction)
    rest = np.eye(len(hessian)) - along
    scale = np.trace(hessian) / len(hessian)
    values, vectors = np.linalg.eigh(rest @ hessian @ rest + scale * along)
    inverse = (vectors / np.maximum(values, 1e-6 * scale)) @ vectors.T
    return np.asarray(rest @ inverse @ rest)


class _View:
    """The record with the present factors: samples turned back, amplitudes in the table."""

    def __init__(self, record: Record, factors: FloatArray) -> None:
        self.record, self.protocol = record, corrected(record, factors)
        frequency = factors[2] if len(factors) > 2 else np.zeros(len(record))
        self.times = record.protocol.sample_times + record.protocol.evolution_time[0]
        self._turn = np.exp(2j * np.pi * frequency[:, None] * self.times).astype(np.complex64)

    def samples(self, shot: int) -> NDArray[np.complex64]:
        """One shot, (1, times, channels y, channels x)."""
        return np.asarray(self._all[shot : shot + 1] * self._turn[shot][None, :, None, None])

    @property
    def _all(self) -> NDArray[np.complex64]:
        if not hasattr(self, "_held"):
            self._held = self.record.samples_in_memory()
        return self._held


class _Problem:
    """The ridge solution for the present factors, and every shot's part in it.

    Channels that carry no weight are filled with what the solution predicts, so that the blocks
    hold; the others count alike.
    """

    FILLINGS = 4

    def __init__(self, view: _View) -> None:
        record = view.record
        if len(record.protocol.evolutions[0]) > 1:
            raise InputError(
                "has several evolution times", "consistency of the shots", "calibrate without it"
            )
        unknown = SpeciesAmounts()
        basis = unknown.basis(record)
        self.view = view
        self.model = ForwardModel.build(
            record.specimen.grid, record.instrument, view.protocol, basis, record.noise_sd
        )
        self.operators = [
            ForwardOperator(self.model.subset(np.array([shot])), np.complex64)
            for shot in range(len(record))
        ]
        weight = record.channel_weight
        self.dead = np.zeros(record.shape[2:], bool) if weight is None else weight == 0
        self.x: NDArray[np.float32] | None = None
        for _ in range(self.FILLINGS if self.dead.any() else 1):
            self._solve()

    @property
    def unknowns(self) -> int:
        """Number of amounts."""
        return int(np.prod(self.quadratic.shape))

    def _solve(self) -> None:
        statistics: Statistics = accumulate(
            self.model, ((slice(s, s + 1), self._filled(s)) for s in range(len(self.operators)))
        )
        self.unit = unit_sizes(statistics.sensitivity())
        self.quadratic = data_term(statistics, True).scaled(self.unit)
        self._step = self.quadratic.step(Symbol(chosen_weight(self.quadratic)))
        self.x = np.asarray(self._step(self.quadratic.linear), np.float32)

    def solve(self, column: NDArray[np.float32]) -> NDArray[np.float32]:
        """(G + Λ)⁻¹ of one column, flat."""
        return np.asarray(self._step(column.reshape(self.quadratic.shape)).ravel())

    def _filled(self, shot: int) -> NDArray[np.complex64]:
        samples = self.view.samples(shot)
        if self.dead.any():
            predicted = 0 if self.x is None else self._predicted(shot)
            samples = np.where(self.dead, predicted, samples).astype(np.complex64)
        return samples

    def _predicted(self, shot: int) -> NDArray[np.complex64]:
        assert self.x is not None
        amounts = self.x * self.unit[:, None, None, None].astype(np.float32)
        return np.asarray(self.operators[shot].apply(amounts.astype(np.complex64)))

    def shot(self, shot: int, parts: int) -> tuple[FloatArray, FloatArray, NDArray[np.float32]]:
        """Gradient (parts,), Hessian's own part (parts, parts) and columns (parts, unknowns)."""
        weight = float(self.model.encoding.weight[shot])
        predicted = self._predicted(shot)
        rest = np.where(self.dead, 0, self.view.samples(shot) - predicted)
        times = (-2 * np.pi * self.view.times)[None, :, None, None].astype(np.float32)
        moved = [predicted, 1j * predicted, 1j * times * predicted][:parts]
        gradient = np.array([weight * np.vdot(one, rest).real for one in moved])
        own = np.array([[weight * np.vdot(a, b).real for b in moved] for a in moved])
        columns = np.stack([self._back(shot, one, weight) for one in moved])
        gradient[0] -= self._freedom(shot, weight)
        return gradient, own, columns

    def _freedom(self, shot: int, weight: float) -> float:
        """½ tr[(Re G + Λ)⁻¹ Re G_j] by one random probe."""
        random = np.random.default_rng([shot, 5])
        shape = (*self.operators[shot].sample_shape, 2)
        noise = random.standard_normal(shape, np.float32) / np.sqrt(2 * weight)
        probe = self._back(shot, noise.astype(np.float32).view(np.complex64)[..., 0], weight)
        return float(probe @ self.solve(probe))

    def _back(
        self, shot: int, samples: NDArray[np.complex64], weight: float
    ) -> NDArray[np.float32]:
        """Re A_jᴴ w samples in the solver's units, flat."""
        back = self.operators[shot].adjoint(samples.astype(np.complex64)).real
        scaled = back * (weight * self.unit[:, None, None, None])
        return np.asarray(scaled, np.float32).ravel()
