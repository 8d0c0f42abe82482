"""How the weight of a prior is chosen: fixed, or from the data and their noise alone."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.blocks import BlockQuadratic

Array = NDArray[np.inexact]
Solver = Callable[[float, Array], Array]
"""Solution for a weight and a right-hand side b, started where the last one ended."""


class WeightRule(Protocol):
    """Chooses λ."""

    def choose(self, quadratic: BlockQuadratic, solver: Solver, again: Solver) -> float:
        """λ in units of the scaled problem; `solver` and `again` keep separate warm starts."""


@dataclass(frozen=True)
class Fixed:
    """A weight of one's own, in units of the noise of a unit-sensitivity unknown."""

    weight: float

    def __post_init__(self) -> None:
        if not self.weight > 0:
            raise InputError("the weight must be positive", "prior")

    def choose(self, quadratic: BlockQuadratic, solver: Solver, again: Solver) -> float:
        return self.weight


@dataclass(frozen=True)
class SteinRisk:
    """Least estimated error of the predicted samples.

    Stein's unbiased estimate with the divergence by one random probe p of b (Ramani, Blu & Unser,
    IEEE Trans. Image Process. 17:1540, 2008): ‖W^{1/2}(y − A x̂)‖² + Re pᴴ(x̂(b + ε p) − x̂(b))/ε · c,
    c = 2 for p with the noise covariance of b.

    The search walks downhill in factors of `ratio` and ends at the vertex of a parabola through the
    three lowest neighbours.

    Attributes
    ----------
    first
        Weight at which the search starts.
    ratio
        Factor between neighbouring weights.
    most
        Most weights tried.
    probe_size
        ε.
    seed
        Of the probe.
    caution
        Factor on the degrees of freedom: above 1 it guards against fitting what neither model nor
        noise accounts for (Kim & Gu, J. R. Stat. Soc. B 66:337, 2004, use 1.2 to 1.4; from memory).
    """

    first: float = 1.0
    ratio: float = 2.0
    most: int = 12
    probe_size: float = 0.1
    seed: int = 0
    caution: float = 1.15

    def choose(self, quadratic: BlockQuadratic, solver: Solver, again: Solver) -> float:
        probe = quadratic.noise(np.random.default_rng(self.seed))
        b = quadratic.linear
        moved_b = b + b.real.dtype.type(self.probe_size) * probe
        risks: dict[int, float] = {}

        def risk(place: int) -> float:
            if place not in risks:
                weight = self.first * self.ratio**place
                x, moved = solver(weight, b), again(weight, moved_b)
                divergence = (
                    2 * self.caution * float(np.vdot(probe, moved - x).real) / self.probe_size
                )
                risks[place] = 2 * quadratic.value(x) + divergence
            return risks[place]

        step = 1 if risk(1) < risk(0) else -1
        place = max(step, 0)
        while len(risks) < self.most and risk(place + step) < risk(place):
            place += step
        return self.first * self.ratio ** (
            place + _vertex(*map(risk, (place - 1, place, place + 1)))
        )


def _vertex(left: float, middle: float, right: float) -> float:
    """Where a parabola through three equidistant points is lowest, at most one step away."""
    curvature = left - 2 * middle + right
    return float(np.clip((left - right) / (2 * curvature), -1, 1)) if curvature > 0 else 0.0


@dataclass(frozen=True)
class Discrepancy:
    """The back-projected residual has the size of the noise's: ‖b − G x̂‖² = ‖p‖².

    p is a draw of the noise of b (Morozov's principle, Sov. Math. Dokl. 7:414, 1966, in the space
    of b). Against the residual of the record itself, in which what the model does not hold counts
    fully, this looks only at what the object can explain; it needs half the solves of `SteinRisk`
    and smooths a little more.

    Attributes
    ----------
    first, ratio, most, seed
        As for `SteinRisk`.
    """

    first: float = 1.0
    ratio: float = 2.0
    most: int = 12
    seed: int = 0

    def choose(self, quadratic: BlockQuadratic, solver: Solver, again: Solver) -> float:
        probe = quadratic.noise(np.random.default_rng(self.seed))
        b = quadratic.linear
        expected = float(np.vdot(probe, probe).real)

        def excess(weight: float) -> float:
            rest = quadratic.gradient(solver(weight, b))
            return float(np.log(float(np.vdot(rest, rest).real) / expected))

        weight, here = self.first, excess(self.first)
        step = 1 / self.ratio if here > 0 else self.ratio
        for _ in range(self.most - 1):
            beyond = excess(weight * step)
            if (beyond > 0) != (here > 0):
                return float(weight * step ** (here / (here - beyond)))
            weight, here = weight * step, beyond
        return weight
