"""ADMM on general data terms, against a general solver of non-negative least squares."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import nnls

from recon.priors import Frame, NonNegative
from recon.solvers import ADMM, Problem, Stopping, Weighted, solve
from recon.solvers.general import GradientStep, MajorisedStep
from tests.test_general_quadratic import NAMES, REALITIES, Dense

RULES = {
    "filling in": ("dead", MajorisedStep()),
    "filling in the edge of the view": ("wide", MajorisedStep()),
    "two gradient steps": ("off lattice", GradientStep(Stopping(tolerance=0, limit=2))),
    "one gradient step": ("layer", GradientStep(Stopping(tolerance=0, limit=1))),
}


@pytest.mark.parametrize("name", RULES)
def test_inexact_steps_reach_non_negative_least_squares(name):
    """Objective within 1e-3 of scipy's active-set solution, relative to the data term."""
    reality, rule = RULES[name]
    dense = Dense(REALITIES[NAMES.index(reality)], real=True)
    quadratic = dense.quadratic
    quadratic.rule = rule
    both = np.concatenate([dense.matrix.real, dense.matrix.imag])
    _, norm = nnls(both, np.concatenate([dense.y.real, dense.y.imag]))
    frame = Frame(quadratic.shape, dense.voxel, np.ones(2))
    problem = Problem(quadratic, (Weighted(NonNegative().on(frame)),))
    solution = solve(problem, ADMM(), Stopping(tolerance=5e-4, limit=300))
    assert (solution.x >= 0).all()
    assert quadratic.value(solution.x) == pytest.approx(0.5 * norm**2, rel=1e-3)
