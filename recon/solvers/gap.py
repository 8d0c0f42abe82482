"""The duality gap, where G has an inverse.

For R positively homogeneous and dual points p_i with R_i*(p_i) = 0 the optimum lies above

    ½ ‖y‖² − ½ vᴴ G⁻¹ v,   v = b − Σ Dᵢᴴ pᵢ

Source: Rockafellar, Convex Analysis, section 31 (Fenchel's duality).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from recon.forward.blocks import BlockQuadratic
from recon.solvers.loop import relative
from recon.solvers.problem import Problem
from recon.symbol import Symbol

Array = NDArray[np.inexact]
Bound = Callable[[Array, Sequence[Array]], float]

WORST_CONDITION = 1e4
"""Ratio of G's eigenvalues beyond which single precision gives no useful inverse."""


def gap_of(problem: Problem) -> Bound | None:
    """(x, duals) ↦ relative duality gap, or None where no useful bound is known.

    None for constraints (the iterates need not meet them), for auxiliary fields, for blocks that
    are not exact, and for G of poor condition.
    """
    quadratic = problem.quadratic
    if any(part.term.constraint or part.term.auxiliary for part in problem.terms):
        return None
    if not isinstance(quadratic, BlockQuadratic):
        return None
    values = quadratic.spectrum[0]
    if not values.min() * WORST_CONDITION > values.max():
        return None
    inverse = quadratic.step(Symbol(0.0))

    def gap(x: Array, duals: Sequence[Array]) -> float:
        pulls = (part.term.adjoint(p) for part, p in zip(problem.terms, duals, strict=True))
        left = quadratic.linear - sum(pulls)
        lower = 0.5 * quadratic.energy - 0.5 * float(np.vdot(left, inverse(left)).real)
        upper = problem.objective(x)
        return relative(max(upper - lower, 0.0), abs(upper))

    return gap
