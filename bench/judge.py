"""Objective in double precision, reference optimum, and clocks that stop while it is looked at."""

from __future__ import annotations

import time
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from recon.forward import BlockQuadratic
from recon.solvers import ADMM, Problem, Stopping, solve

GOAL = 1e-3


def in_double(problem: Problem) -> Problem:
    """The same problem with blocks and b in double precision, where there are blocks."""
    quadratic = problem.quadratic
    if not isinstance(quadratic, BlockQuadratic):
        return problem
    parts = quadratic.statistics
    wide = replace(parts, linear=parts.linear.astype(complex), normal=parts.normal.astype(complex))
    double = BlockQuadratic(wide, quadratic.real)
    double.dtype = np.dtype(float if quadratic.real else complex)
    return Problem(double, problem.terms)


@dataclass(eq=False)
class Judge:
    """Relative gap of an estimate to the reference optimum.

    The gap is (F − F*) over the smaller of F* and F(0) − F*, so that neither the noise's share of
    the objective nor a strong signal makes it easy.
    """

    problem: Problem
    reference: np.ndarray
    optimum: float = field(init=False)
    scale: float = field(init=False)

    def __post_init__(self) -> None:
        self.optimum = self.problem.objective(self.reference)
        empty = self.problem.objective(np.zeros_like(self.reference))
        self.scale = min(self.optimum, empty - self.optimum)

    @classmethod
    def of(cls, problem: Problem, keep: Path, tolerance: float = 1e-6, limit: int = 3000) -> Judge:
        """A long run in double precision, made once and kept in a file."""
        double = in_double(problem)
        if keep.exists():
            return cls(double, np.load(keep))
        solution = solve(double, ADMM(balance_until=200), Stopping(tolerance, limit=limit))
        np.save(keep, solution.x)
        return cls(double, solution.x)

    def gap(self, x: np.ndarray) -> float:
        x = x.reshape(self.reference.shape).astype(self.reference.dtype)
        return (self.problem.objective(x) - self.optimum) / self.scale

    def optimality(self) -> float:
        """Largest violation of 0 ∈ ∂F at the reference, in units of λ, for wavelet ℓ1.

        −W(Gx − b) must be λ·sign where a coefficient is not zero, at most λ where it is, and zero
        for the coarse coefficients.
        """
        (part,) = self.problem.terms
        pull = part.term.analyse(-self.problem.quadratic.gradient(self.reference))
        u = part.term.analyse(self.reference)
        # v in ∂R(u) if and only if prox_R(u + v) = u
        v = pull / part.weight
        size = np.abs(u).max()
        return float(np.abs(part.term.prox(u / size + v, 1.0) - u / size).max())


class Reached(Exception):  # noqa: N818
    """The goal is met."""


class OutOfTime(Exception):  # noqa: N818
    """The budget is spent."""


class Trace:
    """Watches a solver: seconds of its own work and the gap after every iteration."""

    def __init__(self, judge: Judge, budget: float, every: int = 1) -> None:
        self.judge, self.budget, self.every = judge, budget, every
        self.seconds: list[float] = []
        self.gaps: list[float] = []
        self.x: np.ndarray | None = None
        self._spent, self._count = 0.0, 0
        self._since = time.perf_counter()

    def look(self, x: np.ndarray) -> None:
        """To be called after every iteration with the unknown.

        Raises
        ------
        Reached, OutOfTime
        """
        self._spent += time.perf_counter() - self._since
        self._count += 1
        if self._count % self.every == 0:
            self.seconds.append(self._spent)
            self.gaps.append(self.judge.gap(x))
            self.x = x.copy()
            if self.gaps[-1] < GOAL:
                raise Reached
        if self._spent > self.budget:
            raise OutOfTime
        self._since = time.perf_counter()
