"""Accelerated proximal gradient for one prior whose map is unitary.

    x ← Dᴴ prox of (λ/L) R at D(z − (G z − b)/L)
    z ← x + (t − 1)/t' (x − x_before),   t' = (1 + √(1 + 4 t²))/2

L is the exact largest eigenvalue of the blocks. The momentum starts afresh where it points uphill.
Sources: Beck & Teboulle, SIAM J. Imaging Sci. 2:183 (2009); O'Donoghue & Candès, Found. Comput.
Math. 15:715 (2015) for the restart.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.solvers.gap import Bound, gap_of
from recon.solvers.loop import Residuals, relative
from recon.solvers.problem import Problem

Array = NDArray[np.inexact]


@dataclass
class ProximalGradientState:
    """Estimate x, extrapolated point z, momentum t, and what the residuals need."""

    x: Array
    z: Array
    momentum: float = 1.0
    iteration: int = 0
    change: float = np.inf
    gap: float | None = None
    _gap: Bound | None = field(default=None, repr=False)
    _looked: bool = field(default=False, repr=False)

    def copy(self) -> ProximalGradientState:
        """A state that further iterations leave alone."""
        return replace(self, x=self.x.copy(), z=self.z.copy())


@dataclass(frozen=True)
class ProximalGradient:
    """Settings.

    Attributes
    ----------
    restart
        Start the momentum afresh where it points uphill.
    gap_every
        Iterations between evaluations of the duality gap, where it is known; 0 never.
    """

    restart: bool = True
    gap_every: int = 5

    def start(self, problem: Problem, guess: Array | None) -> ProximalGradientState:
        """Zero, or the guess.

        Raises
        ------
        InputError
            There is not exactly one prior, or its map is not unitary.
        """
        quadratic = problem.quadratic
        x = np.zeros(quadratic.shape, quadratic.dtype) if guess is None else guess
        if len(problem.terms) == 1:
            term = problem.terms[0].term
            if term.tight and term.analyse(x).size == x.size:
                x = x.astype(quadratic.dtype)
                return ProximalGradientState(x, x)
        raise InputError(
            "needs one prior with a unitary map (orthogonal wavelets, bounds, low rank)",
            "proximal gradient",
            "use ADMM",
        )

    def advance(self, problem: Problem, state: ProximalGradientState) -> ProximalGradientState:
        """One iteration, in place."""
        (part,) = problem.terms
        quadratic, z = problem.quadratic, state.z
        kind = z.real.dtype.type
        inverse = 1 / quadratic.largest
        moved = z - kind(inverse) * quadratic.gradient(z)
        image = part.term.prox(part.term.analyse(moved), part.weight * inverse)
        x = part.term.adjoint(image)
        state.change = relative(np.linalg.norm(x - z), np.linalg.norm(x))
        uphill = self.restart and float(np.vdot(z - x, x - state.x).real) > 0
        t = 1.0 if uphill else state.momentum
        following = (1 + np.sqrt(1 + 4 * t * t)) / 2
        state.z = x + kind((t - 1) / following) * (x - state.x)
        state.x, state.momentum = x, float(following)
        state.iteration += 1
        self._bound(problem, state)
        return state

    def residuals(self, problem: Problem, state: ProximalGradientState) -> Residuals:
        """‖x − z‖/‖x‖, which vanishes at the optimum only; and the gap where it is known."""
        return Residuals(0.0, state.change, state.gap)

    def estimate(self, problem: Problem, state: ProximalGradientState) -> Array:
        """The unknown."""
        return state.x

    def _bound(self, problem: Problem, state: ProximalGradientState) -> None:
        """The gap from the residual, brought into the dual ball."""
        if not state._looked:
            state._gap = gap_of(problem) if self.gap_every else None
            state._looked = True
        if state._gap is None or state.iteration % self.gap_every:
            return
        (part,) = problem.terms
        p = part.term.analyse(-problem.quadratic.gradient(state.x))
        state.gap = state._gap(state.x, [p - part.term.prox(p, part.weight)])
