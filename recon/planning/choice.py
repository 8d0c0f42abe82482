"""Choose shots: greedy by the fall of the criterion, then exchange.

Every step scores all candidates to first order by one correlation per kind, evaluates the best few
exactly, and takes the one with the largest fall per second. Exchange then takes away the shot
whose loss is least and adds the best other one as long as that helps.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol as Interface

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.errors import InputError
from recon.planning.bound import Experiment
from recon.planning.candidates import Candidates
from recon.planning.information import Information, Pair, Responses, Scores
from recon.protocol import Protocol

FloatArray = NDArray[np.floating]
Progress = Callable[[int, int], None]

REFRESH = 32


class Criterion(Interface):
    """What is to be small."""

    def weights(self, information: Information) -> FloatArray:
        """Weights of the depths for the next step, (nz,), mean 1."""


@dataclass(frozen=True)
class MeanError:
    """The mean variance over voxels of interest.

    Under a stationary prior all voxels of a plane have the same error, so a region of interest
    counts by the depths it has: `depth_weights` (nz,), equal if empty.
    """

    depth_weights: tuple[float, ...] = ()

    def weights(self, information: Information) -> FloatArray:
        nz = information.shape[0]
        weights = np.asarray(self.depth_weights or (1.0,) * nz, float)
        if weights.shape != (nz,) or not weights.min() >= 0 or not weights.sum() > 0:
            raise InputError(f"depth_weights needs {nz} numbers, not all 0", "criterion")
        return weights / weights.mean()


@dataclass(frozen=True)
class WorstError:
    """The largest variance over depths, through the p-norm with reweighting at every step."""

    power: float = 6.0

    def weights(self, information: Information) -> FloatArray:
        variance = information.depth_variance()
        weights = (variance / variance.max()) ** (self.power - 1)
        return weights / weights.mean()


@dataclass(frozen=True)
class Budget:
    """When the table is full: shots, or seconds including gradient pulses."""

    shots: int | None = None
    seconds: float | None = None

    def __post_init__(self) -> None:
        if self.shots is None and self.seconds is None:
            raise InputError("state shots or seconds", "budget")

    def left(self, chosen: int, spent: float, longest: float) -> bool:
        """Room for another shot."""
        within = self.shots is None or chosen < self.shots
        return within and (self.seconds is None or spent + longest <= self.seconds)


@dataclass(frozen=True)
class Choice:
    """Settings.

    Attributes
    ----------
    criterion
        `MeanError()` or `WorstError()`.
    shortlist
        Candidates evaluated exactly in every step.
    exchanges
        Most exchanges after the greedy pass.
    seed
        Breaks ties; the same seed gives the same table.
    """

    criterion: Criterion = field(default_factory=MeanError)
    shortlist: int = 2
    exchanges: int = 0
    seed: int = 0

    def choose(
        self,
        experiment: Experiment,
        candidates: Candidates,
        sample_times: FloatArray,
        budget: Budget,
        progress: Progress | None = None,
    ) -> Chosen:
        """Fill the budget.

        Raises
        ------
        InputError
            The budget has no room for one shot.
        """
        search = _Search(self, experiment, candidates, np.asarray(sample_times, float))
        search.greedy(budget, progress)
        if not search.pairs:
            raise InputError("the budget has no room for one shot", "budget", "give more time")
        search.exchange()
        return search.result()


@dataclass(frozen=True, eq=False)
class Chosen:
    """A chosen table.

    Attributes
    ----------
    pairs
        (kind, lattice place) in the order in which they were chosen.
    protocol
        The table.
    course
        Criterion after each shot of the greedy pass.
    exchanged
        Number of exchanges made.
    """

    pairs: list[Pair]
    protocol: Protocol
    course: list[float]
    exchanged: int


def spectral_modes(experiment: Experiment, sample_times: FloatArray) -> FloatArray:
    """Eigenvalues of the real part of Φᴴ Φ for units of the expected spread, (species,).

    The imaginary part couples species through the odd part of G; the choice leaves it out, the
    bound does not.
    """
    times = Protocol.plain(np.zeros((1, 3)), np.zeros((1, 2)), 1, sample_times)
    basis = species_basis(experiment.species, experiment.instrument, times)
    basis = basis * np.asarray(experiment.expectation.spread_mM)
    return np.maximum(np.linalg.eigvalsh((basis.conj().T @ basis).real), 0)


def information_of(
    experiment: Experiment,
    candidates: Candidates,
    sample_times: FloatArray,
    responses: Responses | None = None,
) -> Information:
    """No shot yet: the prior alone."""
    nz = experiment.grid.shape[0]
    prior = 0.5 / experiment.expectation.spectrum(experiment.grid)
    modes = spectral_modes(experiment, sample_times)
    responses = responses or Responses.of(experiment, candidates)
    return Information(responses, modes, prior, np.ones(nz))


class _Search:
    """The state of one choice."""

    def __init__(
        self,
        settings: Choice,
        experiment: Experiment,
        candidates: Candidates,
        sample_times: FloatArray,
    ) -> None:
        self.settings, self.candidates, self.times = settings, candidates, sample_times
        self.information = information_of(experiment, candidates, sample_times)
        self.scores = Scores(candidates, self.information.responses)
        random = np.random.default_rng(settings.seed)
        self.tie = 1 + 1e-9 * random.random(candidates.allowed.shape)
        self.pairs: list[Pair] = []
        self.course: list[float] = []
        self.exchanged = 0

    def greedy(self, budget: Budget, progress: Progress | None) -> None:
        spent, longest = 0.0, float(self.candidates.seconds[self.candidates.allowed].max())
        while budget.left(len(self.pairs), spent, longest):
            pair, _ = self.best()
            self.take(pair)
            spent += float(self.candidates.seconds[pair])
            self.course.append(self.information.criterion())
            if progress is not None and budget.shots is not None:
                progress(len(self.pairs), budget.shots)

    def best(self) -> tuple[Pair, float]:
        """The candidate with the largest exact fall per second among the shortlist."""
        self.information.depth_weights = self.settings.criterion.weights(self.information)
        rates = self.scores.falls(self.information) / self.candidates.seconds * self.tie
        flat = rates.ravel()
        few = min(self.settings.shortlist, int(self.candidates.count))
        top = np.argpartition(flat, -few)[-few:]
        found = []
        for index in top:
            pair = (int(index // rates.shape[1]), int(index % rates.shape[1]))
            fall = self.information.fall(self._response(pair))
            found.append((fall / self.candidates.seconds[pair], pair, fall))
        _, pair, fall = max(found)
        return pair, fall

    def take(self, pair: Pair) -> None:
        self.information.add(self._response(pair))
        self.pairs.append(pair)
        if len(self.pairs) % REFRESH == 0:
            self.information.refresh()

    def exchange(self) -> None:
        """Swap the least useful shot for the best other one while the criterion falls."""
        for _ in range(self.settings.exchanges):
            losses = [-self.information.fall(self._response(pair), -1.0) for pair in self.pairs]
            place = int(np.argmin(losses))
            pair = self.pairs[place]
            before = self.information.criterion()
            self.information.add(self._response(pair), -1.0)
            other, _ = self.best()
            self.information.add(self._response(other))
            if self.information.criterion() >= before * (1 - 1e-9) or other == pair:
                self.information.add(self._response(other), -1.0)
                self.information.add(self._response(pair))
                break
            self.pairs[place] = other
            self.exchanged += 1
        self.information.refresh()

    def result(self) -> Chosen:
        protocol = self.candidates.protocol(self.pairs, self.times)
        return Chosen(self.pairs, protocol, self.course, self.exchanged)

    def _response(self, pair: Pair) -> NDArray[np.complexfloating]:
        return self.information.responses.at(self.candidates, pair)
