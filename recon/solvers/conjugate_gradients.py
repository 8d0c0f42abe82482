"""Preconditioned conjugate gradients for (G + S) x = b, S a symbol.

For data terms whose blocks are not exact: the blocks of the nearest ideal model make the
preconditioner. Residuals r are measured as √(rᴴ M⁻¹ r) against the same of b, M the
preconditioner: where M ≈ G + S this is the relative error in the energy norm.
Source: Hestenes & Stiefel, J. Res. Natl. Bur. Stand. 49:409 (1952).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.solvers.loop import Reason, Residuals, Stopping, relative
from recon.solvers.problem import Problem
from recon.symbol import Symbol

Array = NDArray[np.inexact]
Map = Callable[[Array], Array]


@dataclass(frozen=True)
class System:
    """A Hermitian positive definite map and an approximation of its inverse of the same kind."""

    apply: Map
    precondition: Map


@dataclass
class CGState:
    """Everything the next iteration needs.

    `size` is rᴴ M⁻¹ r, `scale` the same of the right-hand side.
    """

    x: Array
    residual: Array
    direction: Array
    size: float
    scale: float
    iteration: int = 0
    system: System | None = field(default=None, repr=False)

    @property
    def relative_residual(self) -> float:
        """√(rᴴ M⁻¹ r / bᴴ M⁻¹ b)."""
        return relative(np.sqrt(max(self.size, 0.0)), np.sqrt(self.scale))

    def copy(self) -> CGState:
        """A state that further iterations leave alone."""
        arrays = (self.x.copy(), self.residual.copy(), self.direction.copy())
        return replace(self, x=arrays[0], residual=arrays[1], direction=arrays[2])


def begin(system: System, right: Array, start: Array | None = None) -> CGState:
    """The state before the first iteration; zero where no start is given."""
    pulled = system.precondition(right)
    scale = _inner(right, pulled)
    if start is None:
        return CGState(np.zeros_like(right), right.copy(), pulled, scale, scale, system=system)
    residual = right - system.apply(start)
    pulled = system.precondition(residual)
    return CGState(
        start.astype(right.dtype), residual, pulled, _inner(residual, pulled), scale, system=system
    )


def advance(state: CGState) -> CGState:
    """One iteration, in place."""
    system = state.system
    assert system is not None
    kind = state.x.real.dtype.type
    state.iteration += 1
    if state.size <= 0:
        return state
    image = system.apply(state.direction)
    length = kind(state.size / _inner(state.direction, image))
    state.x = state.x + length * state.direction
    state.residual = state.residual - length * image
    pulled = system.precondition(state.residual)
    size = _inner(state.residual, pulled)
    state.direction = pulled + kind(size / state.size) * state.direction
    state.size = size
    return state


def iterate(
    system: System, right: Array, stopping: Stopping, start: Array | None = None
) -> tuple[CGState, Reason]:
    """Iterate until the relative residual is below the tolerance or the limit is reached."""
    state = begin(system, right, start)
    for _ in range(stopping.limit):
        if state.relative_residual < stopping.tolerance:
            break
        advance(state)
    met = state.relative_residual < stopping.tolerance
    return state, Reason.CONVERGED if met else Reason.LIMIT


@dataclass(frozen=True)
class ConjugateGradients:
    """Least squares with a quadratic penalty ½ xᴴ S x, for the loop of `recon.solvers.loop`.

    Attributes
    ----------
    damping
        S; `Symbol(λ)` for ridge.
    """

    damping: Symbol

    def start(self, problem: Problem, guess: Array | None) -> CGState:
        """Zero, or the guess.

        Raises
        ------
        InputError
            The problem has priors: they are not quadratic.
        """
        if problem.terms:
            raise InputError(
                "conjugate gradients solve quadratic problems only", "solver", "use ADMM"
            )
        system = self._system(problem)
        return begin(system, problem.quadratic.linear.astype(problem.quadratic.dtype), guess)

    def advance(self, problem: Problem, state: CGState) -> CGState:
        """One iteration, in place."""
        if state.system is None:
            state.system = self._system(problem)
        return advance(state)

    def residuals(self, problem: Problem, state: CGState) -> Residuals:
        """The relative residual; there is no second one."""
        return Residuals(0.0, state.relative_residual)

    def estimate(self, problem: Problem, state: CGState) -> Array:
        """The unknown."""
        return state.x

    def _system(self, problem: Problem) -> System:
        quadratic = problem.quadratic
        system = getattr(quadratic, "system", None)
        if system is not None:
            found: System = system(self.damping)
            return found
        return plain_system(quadratic.normal, self.damping)


def plain_system(normal: Map, damping: Symbol) -> System:
    """G + S without a preconditioner."""

    def apply(x: Array) -> Array:
        return normal(x) + damping.apply(x)

    return System(apply, np.array)


def _inner(a: Array, b: Array) -> float:
    return float(np.vdot(a, b).real)
