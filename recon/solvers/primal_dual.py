"""Primal–dual with the exact resolvent of the data term.

    x ← (G + 1/τ)⁻¹ (b + x/τ − Σ Dᵢᴴ pᵢ)
    pᵢ ← projection: vᵢ − σ prox of (λᵢ/σ) Rᵢ at vᵢ/σ,   vᵢ = pᵢ + σ Dᵢ (2 x − x_before)

then both over-relaxed by α. τ σ ‖Σ Dᵢᴴ Dᵢ‖ = 1. Nothing is inverted but G + 1/τ, whatever the maps.
Sources: Chambolle & Pock, J. Math. Imaging Vis. 40:120 (2011); Condat, J. Optim. Theory Appl.
158:460 (2013) for the over-relaxation; Goldstein, Li & Yuan, NIPS (2015) for the balance.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import reduce
from operator import add

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.solvers.gap import Bound, gap_of
from recon.solvers.loop import Residuals, relative
from recon.solvers.problem import Problem
from recon.symbol import Symbol

Array = NDArray[np.inexact]


@dataclass
class PrimalDualState:
    """Unknown x, duals p, dual step σ, and what the residuals need."""

    x: Array
    p: list[Array]
    sigma: float
    iteration: int = 0
    primal: float = np.inf
    dual: float = np.inf
    gap: float | None = None
    _step: Callable[[Array], Array] | None = field(default=None, repr=False)
    _gap: Bound | None = field(default=None, repr=False)
    _looked: bool = field(default=False, repr=False)

    def copy(self) -> PrimalDualState:
        """A state that further iterations leave alone."""
        return replace(self, x=self.x.copy(), p=[p.copy() for p in self.p])


@dataclass(frozen=True)
class PrimalDual:
    """Settings.

    Attributes
    ----------
    sigma
        Dual step at the start, in units of the mean diagonal of G.
    over_relaxation
        α, from 1 to below 2.
    balance_every, balance_until, imbalance
        As for ADMM: adjustment of σ against τ.
    gap_every
        Iterations between evaluations of the duality gap, where it is known; 0 never.
    """

    sigma: float = 1.0
    over_relaxation: float = 1.7
    balance_every: int = 5
    balance_until: int = 60
    imbalance: float = 3.0
    gap_every: int = 5

    def __post_init__(self) -> None:
        if not (1 <= self.over_relaxation < 2 and self.sigma > 0):
            raise InputError(
                "over_relaxation must be from 1 to below 2, sigma positive", "primal-dual settings"
            )

    def start(self, problem: Problem, guess: Array | None) -> PrimalDualState:
        """Zero duals; x from the guess, or from one damped least-squares step.

        Raises
        ------
        InputError
            A prior has an auxiliary field, which needs its joint step.
        """
        if any(part.term.auxiliary for part in problem.terms):
            raise InputError("a prior with an auxiliary field", "primal-dual", "use ADMM")
        quadratic = problem.quadratic
        if guess is None:
            guess = quadratic.step(Symbol(self.sigma))(quadratic.linear)
        x = guess.astype(quadratic.dtype)
        p = [np.zeros_like(part.term.analyse(x)) for part in problem.terms]
        return PrimalDualState(x, p, self.sigma)

    def advance(self, problem: Problem, state: PrimalDualState) -> PrimalDualState:
        """One iteration, in place."""
        self._prepare(problem, state)
        quadratic, kind = problem.quadratic, state.x.real.dtype.type
        sigma, inverse_tau = state.sigma, state.sigma * _norm(problem)
        pulls = [part.term.adjoint(p) for part, p in zip(problem.terms, state.p, strict=True)]
        right = quadratic.linear + kind(inverse_tau) * state.x - sum(pulls)
        assert state._step is not None
        x = state._step(right)
        ahead = 2 * x - state.x
        moved = scale = 0.0
        for place, part in enumerate(problem.terms):
            before = state.p[place]
            v = before + kind(sigma) * part.term.analyse(ahead)
            p = v - kind(sigma) * part.term.prox(v / kind(sigma), part.weight / sigma)
            moved += float(np.linalg.norm(p - before)) ** 2
            scale += float(np.linalg.norm(p)) ** 2
            state.p[place] = before + kind(self.over_relaxation) * (p - before)
        state.primal = relative(np.linalg.norm(x - state.x), np.linalg.norm(x))
        state.dual = relative(np.sqrt(moved), np.sqrt(scale))
        state.x = state.x + kind(self.over_relaxation) * (x - state.x)
        state.iteration += 1
        if state._gap is not None and state.iteration % self.gap_every == 0:
            pairs = zip(problem.terms, state.p, strict=True)
            inside = [p - part.term.prox(p, part.weight) for part, p in pairs]
            state.gap = state._gap(state.x, inside)
        return state

    def residuals(self, problem: Problem, state: PrimalDualState) -> Residuals:
        """Relative change of x and of p over one iteration; both vanish at the optimum only."""
        return Residuals(state.primal, state.dual, state.gap)

    def estimate(self, problem: Problem, state: PrimalDualState) -> Array:
        """x, brought within the bounds if there are any."""
        x = state.x
        for part in problem.terms:
            if part.term.constraint:
                x = part.term.adjoint(part.term.prox(part.term.analyse(x), 1.0))
        return x

    def _prepare(self, problem: Problem, state: PrimalDualState) -> None:
        """Adjust σ where primal and dual changes are out of balance; (re)build the resolvent."""
        if not state._looked:
            state._gap = gap_of(problem) if self.gap_every else None
            state._looked = True
        due = self.balance_every and state.iteration % self.balance_every == 0
        if due and 0 < state.iteration <= self.balance_until and np.isfinite(state.primal):
            ratio = relative(state.primal, max(state.dual, 1e-12))
            if ratio > self.imbalance or ratio < 1 / self.imbalance:
                state.sigma *= float(np.clip(np.sqrt(ratio), 0.1, 10))
                state._step = None
        if state._step is None:
            state._step = problem.quadratic.step(Symbol(state.sigma * _norm(problem)))


def _norm(problem: Problem) -> float:
    """‖Σ Dᵢᴴ Dᵢ‖, or an upper bound."""
    symbol = reduce(add, (part.term.symbol for part in problem.terms))
    largest = float(np.max(symbol.lateral))
    if symbol.axial is None:
        return largest
    axial = symbol.axial.reshape(*symbol.axial.shape[:2], -1).transpose(2, 0, 1)
    return largest + float(np.linalg.eigvalsh(axial).max())
