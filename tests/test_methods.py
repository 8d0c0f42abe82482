"""Proximal gradient and primal–dual against ADMM; gaps; states kept in files."""

from __future__ import annotations

import numpy as np
import pytest

from recon.checkpoint import load_state, save_state
from recon.errors import InputError
from recon.priors import (
    LowRank,
    NonNegative,
    TotalGeneralisedVariation,
    TotalVariation,
    UndecimatedWaveletSparsity,
    WaveletSparsity,
)
from recon.solvers import (
    ADMM,
    PrimalDual,
    Problem,
    ProximalGradient,
    Reason,
    Stopping,
    Weighted,
    solve,
)
from tests.problems import small_quadratic
from tests.test_solvers import bound

WAVELET = (WaveletSparsity("haar", 2),)
PAIRS = [
    (ProximalGradient(), WAVELET),
    (ProximalGradient(restart=False), (NonNegative(),)),
    (ProximalGradient(), (LowRank(),)),
    (PrimalDual(), WAVELET),
    (PrimalDual(), (TotalVariation(), NonNegative())),
    (PrimalDual(), (UndecimatedWaveletSparsity("haar", 2, joint=True), LowRank())),
]


def problem_of(priors, weight=1.0, real=True, shots=12):
    quadratic, _, _ = small_quadratic(real, shots=shots)
    return Problem(quadratic, tuple(Weighted(t, weight) for t in bound(priors, quadratic)))


def name(value):
    if isinstance(value, tuple):
        return "+".join(type(part).__name__ for part in value)
    return type(value).__name__


@pytest.mark.parametrize("method, priors", PAIRS, ids=name)
def test_same_optimum_as_admm(method, priors):
    """Objectives agree within 1e-4 of each other; ADMM itself is checked against cvxpy."""
    problem = problem_of(priors)
    reference = solve(problem, ADMM(), Stopping(1e-5, limit=3000))
    found = solve(problem, method, Stopping(2e-5, limit=20000))
    assert found.reason is Reason.CONVERGED
    best = problem.objective(reference.x)
    assert problem.objective(found.x) == pytest.approx(best, rel=1e-4)
    assert found.x.dtype == np.float32


@pytest.mark.parametrize("method", [ProximalGradient(), PrimalDual()], ids=name)
def test_gap_bounds_the_distance_to_the_optimum(method):
    """With enough shots for G to have an inverse the gap closes, and it never lies."""
    problem = problem_of(WAVELET, shots=400)
    optimum = problem.objective(solve(problem, ADMM(), Stopping(1e-6, limit=3000)).x)
    found = solve(problem, method, Stopping(0.0, gap=1e-3, limit=20000))
    assert found.reason is Reason.GAP_CLOSED
    objective = problem.objective(found.x)
    assert objective - optimum < 1e-3 * objective
    assert method.residuals(problem, found.state).gap < 1e-3


@pytest.mark.parametrize("method", [ADMM(), ProximalGradient(), PrimalDual()], ids=name)
@pytest.mark.parametrize("real", [True, False])
def test_resumed_from_a_file_equals_unbroken(method, real, tmp_path):
    """3 iterations, kept in a file, and 5 more: the same bits as 8."""
    problem = problem_of(WAVELET, real=real)
    whole = solve(problem, method, Stopping(0.0, limit=8))
    first = solve(problem, method, Stopping(0.0, limit=3))
    save_state(tmp_path / "state.h5", first.state)
    state = load_state(tmp_path / "state.h5", type(first.state))
    rest = solve(problem, method, Stopping(0.0, limit=5), state=state)
    np.testing.assert_array_equal(rest.x, whole.x)
    assert rest.x.dtype == whole.x.dtype == problem.quadratic.dtype


def test_a_state_file_of_another_solver_is_refused(tmp_path):
    problem = problem_of(WAVELET)
    save_state(tmp_path / "s.h5", solve(problem, PrimalDual(), Stopping(limit=1)).state)
    with pytest.raises(InputError, match="holds a PrimalDualState, not a ADMMState"):
        load_state(tmp_path / "s.h5", type(ADMM().start(problem, None)))
    with pytest.raises(InputError, match="cannot be kept"):
        save_state(tmp_path / "s.h5", object())


@pytest.mark.parametrize(
    "method, priors, says",
    [
        (ProximalGradient(), (TotalVariation(),), "unitary"),
        (ProximalGradient(), (UndecimatedWaveletSparsity("haar", 2),), "unitary"),
        (ProximalGradient(), (*WAVELET, NonNegative()), "one prior"),
        (PrimalDual(), (TotalGeneralisedVariation(),), "auxiliary field"),
    ],
    ids=name,
)
def test_what_a_method_cannot_do_is_refused(method, priors, says):
    with pytest.raises(InputError, match=says):
        solve(problem_of(priors), method)
    with pytest.raises(InputError, match="over_relaxation"):
        PrimalDual(over_relaxation=2.5)
