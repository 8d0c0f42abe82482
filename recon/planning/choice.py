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

from recon.errors import InputError
from recon.planning.bound import Experiment
from recon.planning.candidates import Candidates
from recon.planning.information import Information
from recon.planning.responses import Pair, Responses
from recon.planning.scores import Scores
from recon.planning.spectra import Spectra
from recon.protocol import Protocol, SpectralAxis

FloatArray = NDArray[np.floating]
Progress = Callable[[int, int], None]

REFRESH = 32
FEW = 4
LAZY = 2


class Criterion(Interface):
    """What is to be small."""

    def weights(self, variance: FloatArray) -> FloatArray:
        """Weights of the depths for the next step, (nz,), mean 1, given their variances."""

    def value(self, variance: FloatArray) -> float:
        """What the variances per depth amount to."""


@dataclass(frozen=True)
class MeanError:
    """The mean variance over voxels of interest.

    Under a stationary prior all voxels of a plane have the same error, so a region of interest
    counts by the depths it has: `depth_weights` (nz,), equal if empty.
    """

    depth_weights: tuple[float, ...] = ()

    @classmethod
    def of_region(cls, region: NDArray[np.bool_]) -> MeanError:
        """Weights by the number of voxels that a mask (nz, ny, nx) has in each plane."""
        return cls(tuple(float(count) for count in region.sum(axis=(1, 2))))

    def weights(self, variance: FloatArray) -> FloatArray:
        nz = len(variance)
        weights = np.asarray(self.depth_weights or (1.0,) * nz, float)
        if weights.shape != (nz,) or not weights.min() >= 0 or not weights.sum() > 0:
            raise InputError(f"depth_weights needs {nz} numbers, not all 0", "criterion")
        return weights / weights.mean()

    def value(self, variance: FloatArray) -> float:
        return float((self.weights(variance) * variance).mean())


@dataclass(frozen=True)
class WorstError:
    """The largest variance over depths, through the p-norm with reweighting at every step."""

    power: float = 6.0

    def weights(self, variance: FloatArray) -> FloatArray:
        weights = (variance / variance.max()) ** (self.power - 1)
        return weights / weights.mean()

    def value(self, variance: FloatArray) -> float:
        top = float(variance.max())
        return top * float(((variance / top) ** self.power).mean()) ** (1 / self.power)


@dataclass(frozen=True)
class Budget:
    """When the table is full: shots, or seconds including gradient pulses."""

    shots: int | None = None
    seconds: float | None = None

    def __post_init__(self) -> None:
        if self.shots is None and self.seconds is None:
            raise InputError("state shots or seconds", "budget")

    def left(self, chosen: int, spent: float, longest: float) -> bool:
        """Room for another shot of the shortest duration."""
        within = self.shots is None or chosen < self.shots
        return within and spent + longest <= self.most

    @property
    def most(self) -> float:
        """Seconds there are."""
        return np.inf if self.seconds is None else self.seconds * (1 + 1e-9)


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
    rescore_all_every
        Steps between two scorings of all kinds; 1 for always.
    seed
        Breaks ties; the same seed gives the same table.
    """

    criterion: Criterion = field(default_factory=MeanError)
    shortlist: int = 2
    exchanges: int = 0
    rescore_all_every: int = 16
    seed: int = 0

    def choose(
        self,
        experiment: Experiment,
        candidates: Candidates,
        sample_times: FloatArray,
        budget: Budget,
        progress: Progress | None = None,
        spectral_axis: SpectralAxis = SpectralAxis.EVOLVE_THEN_ENCODE,
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
        search.exchange(budget)
        return search.result(spectral_axis)


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
    value
        Criterion after the exchanges.
    exchanged
        Number of exchanges made.
    """

    pairs: list[Pair]
    protocol: Protocol
    course: list[float]
    value: float
    exchanged: int


def information_of(
    experiment: Experiment,
    candidates: Candidates,
    sample_times: FloatArray,
    responses: Responses | None = None,
) -> Information:
    """No shot yet: the prior alone."""
    evolutions = np.unique([kind.evolution_s for kind in candidates.kinds])
    spectra = Spectra.of(experiment, np.asarray(sample_times, float), evolutions)
    responses = responses or Responses.of(experiment, candidates)
    return Information(responses, spectra, experiment.expectation)


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
        self.scores = Scores(self.information)
        random = np.random.default_rng(settings.seed)
        self.tie = 1 + 1e-9 * random.random(candidates.allowed.shape)
        self.shortest = float(candidates.seconds[candidates.allowed].min())
        self.rates: FloatArray = np.full(candidates.allowed.shape, -np.inf)
        self.steps = 0
        self.pairs: list[Pair] = []
        self.course: list[float] = []
        self.spent = 0.0
        self.exchanged = 0

    def greedy(self, budget: Budget, progress: Progress | None) -> None:
        while budget.left(len(self.pairs), self.spent, self.shortest):
            self.put(self.best(budget.most - self.spent))
            self.course.append(self.value())
            if progress is not None:
                share = self.spent / budget.most
                if budget.shots is not None:
                    share = max(share, len(self.pairs) / budget.shots)
                progress(len(self.pairs), max(round(len(self.pairs) / share), len(self.pairs)))

    def value(self) -> float:
        """The criterion."""
        return self.settings.criterion.value(self.information.depth_variance())

    def best(self, room: float) -> Pair:
        """Of the candidates that fit, the one with the largest fall per second."""
        variance = self.information.depth_variance()
        self.information.depth_weights = self.settings.criterion.weights(variance)
        rates = self.score()
        if np.isfinite(room):
            rates = np.where(self.candidates.seconds > room, -np.inf, rates)
        flat = rates.ravel()
        few = min(self.settings.shortlist, int(np.isfinite(flat).sum()))
        top = np.argpartition(flat, -few)[-few:]
        found = []
        for index in top:
            pair = (int(index // rates.shape[1]), int(index % rates.shape[1]))
            fall = self.information.fall(pair)
            found.append((fall / self.candidates.seconds[pair], pair))
        return max(found)[1]

    def score(self) -> FloatArray:
        """First-order falls per second of all candidates, (kinds, lattice).

        Falls shrink as shots are added, nearly always; so a kind whose last known best lies below
        a new one need not be scored again (lazy greedy; Minoux, 1978). Now and then all are.
        """
        score = self.scores.against(self.information)
        kinds = np.arange(len(self.candidates.kinds))
        old = np.ones(len(kinds), bool)
        if self.steps % self.settings.rescore_all_every:
            first = [int(np.argmax(self.rates.max(axis=1)))]
        else:
            first = kinds.tolist()
        self.steps += 1
        while first:
            some = np.array(first)
            self.rates[some] = score(some) * self.tie[some] / self.candidates.seconds[some]
            old[some] = False
            best = self.rates.max(axis=1)
            ahead = np.flatnonzero(old & (best > best[~old].max()))
            first = ahead[np.argsort(best[ahead])[-LAZY:]].tolist()
        return self.rates

    def put(self, pair: Pair) -> None:
        """Add a shot."""
        self.information.add(pair)
        self.pairs.append(pair)
        self.spent += float(self.candidates.seconds[pair])
        if len(self.pairs) % REFRESH == 0:
            self.information.refresh()

    def take(self, place: int) -> Pair:
        """Remove a shot."""
        pair = self.pairs.pop(place)
        self.information.add(pair, -1.0)
        self.spent -= float(self.candidates.seconds[pair])
        return pair

    def exchange(self, budget: Budget) -> None:
        """Swap the least useful shot for the best other one while the criterion falls.

        The losses are computed once for all shots, and afresh for the least useful few.
        """
        losses: dict[Pair, float] = {}
        for _ in range(self.settings.exchanges):
            place = self.least_useful(losses)
            before = self.value()
            old = self.take(place)
            self.put(self.best(budget.most - self.spent))
            if self.value() >= before * (1 - 1e-9):
                self.take(len(self.pairs) - 1)
                self.put(old)
                self.pairs.insert(place, self.pairs.pop())
                break
            self.exchanged += 1
        self.information.refresh()

    def least_useful(self, losses: dict[Pair, float]) -> int:
        """Place of the shot whose removal costs least per second; updates `losses`."""

        def loss(pair: Pair) -> float:
            return -self.information.fall(pair, -1.0) / float(self.candidates.seconds[pair])

        for pair in self.pairs:
            if pair not in losses:
                losses[pair] = loss(pair)
        known = sorted(set(self.pairs), key=lambda pair: losses[pair])
        for pair in known[:FEW]:
            losses[pair] = loss(pair)
        return int(np.argmin([losses[pair] for pair in self.pairs]))

    def result(self, spectral_axis: SpectralAxis) -> Chosen:
        protocol = self.candidates.protocol(self.pairs, self.times, spectral_axis=spectral_axis)
        return Chosen(self.pairs, protocol, self.course, self.value(), self.exchanged)
