"""Alternating directions with the exact quadratic step.

    x ← (G + ρ Σ DᵢᴴDᵢ)⁻¹ (b + ρ Σ Dᵢᴴ(uᵢ − dᵢ))
    vᵢ ← α Dᵢ x + (1 − α) uᵢ
    uᵢ ← prox of (λᵢ/ρ) Rᵢ at vᵢ + dᵢ
    dᵢ ← dᵢ + vᵢ − uᵢ

Source: Boyd, Parikh, Chu, Peleato & Eckstein, Foundations and Trends in Machine Learning 3:1
(2011), over-relaxation and residual balancing of section 3.4.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import reduce
from operator import add
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.solvers.loop import Residuals, relative
from recon.solvers.problem import Problem, Step

Array = NDArray[np.inexact]


@dataclass
class ADMMState:
    """Split variables u, scaled duals d, penalty ρ, and what the residuals need."""

    u: list[Array]
    d: list[Array]
    penalty: float
    iteration: int = 0
    x: Array | None = None
    primal: float = np.inf
    dual: float = np.inf
    _step: Step | None = field(default=None, repr=False)

    def copy(self) -> ADMMState:
        """A state that further iterations leave alone."""
        return ADMMState(
            [u.copy() for u in self.u],
            [d.copy() for d in self.d],
            self.penalty,
            self.iteration,
            None if self.x is None else self.x.copy(),
            self.primal,
            self.dual,
            self._step,
        )


@dataclass(frozen=True)
class ADMM:
    """Settings.

    Attributes
    ----------
    penalty
        ρ at the start, in units of the mean diagonal of G; None chooses it from the data.
    over_relaxation
        α, from 1 to below 2.
    balance_every
        Iterations between adjustments of ρ; 0 keeps it.
    balance_until
        No adjustment after this many iterations, so that convergence is assured.
    imbalance
        Ratio of the residuals beyond which ρ is adjusted.
    """

    penalty: float | None = None
    over_relaxation: float = 1.7
    balance_every: int = 5
    balance_until: int = 60
    imbalance: float = 3.0

    def __post_init__(self) -> None:
        if not 1 <= self.over_relaxation < 2:
            raise InputError("over_relaxation must be from 1 to below 2", "ADMM settings")
        if self.penalty is not None and not self.penalty > 0:
            raise InputError("penalty must be positive", "ADMM settings")

    def start(self, problem: Problem, guess: Array | None) -> ADMMState:
        """Zero duals; u from the guess, or from one damped least-squares step."""
        quadratic = problem.quadratic
        penalty = 1.0 if self.penalty is None else self.penalty
        step = _exact_step(problem, penalty)
        guess = step(quadratic.linear) if guess is None else guess
        u = [part.term.analyse(guess.astype(quadratic.dtype, copy=False)) for part in problem.terms]
        state = ADMMState(u, [np.zeros_like(one) for one in u], penalty)
        state._step = step
        return state

    def advance(self, problem: Problem, state: ADMMState) -> ADMMState:
        """One iteration, in place."""
        self._balance(problem, state)
        quadratic, rho, alpha = problem.quadratic, state.penalty, self.over_relaxation
        kind = quadratic.dtype.type(0).real.dtype.type
        targets = [u - d for u, d in zip(state.u, state.d, strict=True)]
        pulled = [
            part.term.adjoint(target) for part, target in zip(problem.terms, targets, strict=True)
        ]
        right: Any = reduce(add, pulled)
        right = right * kind(rho)
        right += quadratic.linear
        assert state._step is not None
        x = state.x = state._step(right, state.x)
        primal = dual = primal_scale = dual_scale = 0.0
        for place, part in enumerate(problem.terms):
            image = part.term.image_near(x, targets[place])
            before, d = state.u[place], state.d[place]
            relaxed = kind(alpha) * image + kind(1 - alpha) * before
            relaxed += d
            u = part.term.prox(relaxed, part.weight / rho)
            state.u[place], state.d[place] = u, np.subtract(relaxed, u, out=relaxed)
            primal += _squared(image - u)
            primal_scale += max(_squared(image), _squared(u))
            dual += _squared(u - before)
            dual_scale += _squared(state.d[place])
        state.iteration += 1
        state.primal = relative(np.sqrt(primal), np.sqrt(primal_scale))
        state.dual = relative(np.sqrt(dual), np.sqrt(max(dual_scale, dual)))
        return state

    def residuals(self, problem: Problem, state: ADMMState) -> Residuals:
        """‖Dx − u‖ over ‖u‖, and ‖u − u_before‖ over ‖d‖: ρ cancels in the second."""
        return Residuals(state.primal, state.dual)

    def estimate(self, problem: Problem, state: ADMMState) -> Array:
        """Dᴴu of the last term with DᴴD = 1 (feasible, or sparse), else x."""
        for part, u in zip(reversed(problem.terms), reversed(state.u), strict=True):
            if part.term.tight:
                return part.term.adjoint(u)
        assert state.x is not None
        return state.x

    def _balance(self, problem: Problem, state: ADMMState) -> None:
        """Adjust ρ where the residuals are out of balance, and (re)build the exact step."""
        due = self.balance_every and state.iteration % self.balance_every == 0
        if due and 0 < state.iteration <= self.balance_until and np.isfinite(state.primal):
            ratio = relative(state.primal, max(state.dual, 1e-12))
            if ratio > self.imbalance or ratio < 1 / self.imbalance:
                factor = float(np.clip(np.sqrt(ratio), 0.1, 10))
                state.penalty *= factor
                state.d = [d / d.real.dtype.type(factor) for d in state.d]
                state._step = None
        if state._step is None:
            state._step = _exact_step(problem, state.penalty)


def _exact_step(problem: Problem, penalty: float) -> Step:
    symbols = (part.term.symbol for part in problem.terms)
    return problem.quadratic.step(reduce(add, symbols).scaled(penalty))


def _squared(values: Array) -> float:
    return float(np.vdot(values, values).real)
