"""The one loop that drives every iterative method, and its vocabulary of stopping.

A method is settings plus three functions on a state it owns: `start`, `advance` and `residuals`.
The state holds everything the next iteration needs, so a run can stop, be stored and go on, and
2 + 2 iterations equal 4.

Runs repeat bit for bit in one thread (`OMP_NUM_THREADS=1`): transforms use one thread anyway, and
everything random has a seed in the settings.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from enum import Enum
from typing import Any, Generic, Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.solvers.problem import Problem

Array = NDArray[np.inexact]
State = TypeVar("State")


class Reason(Enum):
    """Why a solver stopped."""

    CONVERGED = "residuals fell below the tolerance"
    GAP_CLOSED = "the duality gap fell below the tolerance"
    LIMIT = "the iteration limit was reached before the tolerance"
    INTERRUPTED = "interrupted; the state is kept and can go on"
    DIRECT = "solved directly, no iteration"


@dataclass(frozen=True)
class Residuals:
    """Relative residuals of the optimality conditions, and the relative duality gap if known."""

    primal: float
    dual: float
    gap: float | None = None


@dataclass(frozen=True)
class Stopping:
    """When to stop.

    Attributes
    ----------
    tolerance
        Both relative residuals must fall below it.
    gap
        Or the relative duality gap below this, for methods that know it.
    limit
        Most iterations of one run; reaching it is reported as not converged.
    """

    tolerance: float = 1e-3
    gap: float = 0.0
    limit: int = 500

    def __post_init__(self) -> None:
        if not (self.tolerance >= 0 and self.gap >= 0 and self.limit >= 0):
            raise InputError("tolerance, gap and limit must not be negative", "stopping rule")

    def reason(self, residuals: Residuals) -> Reason | None:
        """The reason to stop now, or None."""
        if residuals.gap is not None and residuals.gap < self.gap:
            return Reason.GAP_CLOSED
        if max(residuals.primal, residuals.dual) < self.tolerance:
            return Reason.CONVERGED
        return None


class Method(Protocol, Generic[State]):
    """Settings of an iterative method."""

    def start(self, problem: Problem, guess: Array | None) -> State:
        """The state before the first iteration."""

    def advance(self, problem: Problem, state: State) -> State:
        """One iteration; may reuse the state's memory."""

    def residuals(self, problem: Problem, state: State) -> Residuals:
        """How far the state is from optimal."""

    def estimate(self, problem: Problem, state: State) -> Array:
        """The unknown."""


@dataclass
class History:
    """One entry per iteration; `objective` only where the loop was asked to evaluate it."""

    primal: list[float] = field(default_factory=list)
    dual: list[float] = field(default_factory=list)
    objective: list[float] = field(default_factory=list)
    seconds: list[float] = field(default_factory=list)

    def __len__(self) -> int:
        return len(self.primal)


@dataclass(frozen=True, eq=False)
class Solution(Generic[State]):
    """What a solver returns.

    Attributes
    ----------
    x
        The unknown.
    reason
        Why it stopped.
    misfit
        Mean squared data residual in units of the noise variance.
    history
        What happened on the way.
    state
        From which `solve` can go on.
    """

    x: Array
    reason: Reason
    misfit: float
    history: History
    state: State


Watcher = Callable[[int, Residuals], None]


def solve(
    problem: Problem,
    method: Method[State],
    stopping: Stopping | None = None,
    *,
    guess: Array | None = None,
    state: State | None = None,
    watch: Watcher | None = None,
    with_objective: bool = False,
) -> Solution[State]:
    """Iterate until the stopping rule is met, the limit reached or the user interrupts.

    Parameters
    ----------
    guess
        Where to start, if not from the method's own start.
    state
        The state of an earlier solution, to go on from.
    watch
        Called as watch(iteration, residuals); a KeyboardInterrupt raised in it or during an
        iteration ends the run with the last whole state.
    with_objective
        Evaluate the objective at every iteration (costs about one more iteration).
    """
    stopping = stopping or Stopping()
    state = method.start(problem, guess) if state is None else state
    history, reason, begin = History(), Reason.LIMIT, time.perf_counter()
    try:
        for iteration in range(1, stopping.limit + 1):
            state = method.advance(problem, state)
            residuals = method.residuals(problem, state)
            history.primal.append(residuals.primal)
            history.dual.append(residuals.dual)
            history.seconds.append(time.perf_counter() - begin)
            if with_objective:
                history.objective.append(problem.objective(method.estimate(problem, state)))
            if watch is not None:
                watch(iteration, residuals)
            found = stopping.reason(residuals)
            if found is not None:
                reason = found
                break
    except KeyboardInterrupt:
        reason = Reason.INTERRUPTED
    x = method.estimate(problem, state)
    return Solution(x, reason, problem.quadratic.misfit(x), history, state)


def relative(difference: Any, scale: Any) -> float:
    """‖difference‖ / ‖scale‖, 0 when both vanish."""
    size = float(scale)
    return float(difference) / size if size > 0 else (0.0 if difference == 0 else np.inf)
