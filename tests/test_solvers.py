"""The loop and ADMM against a general convex solver; stopping, resuming, interruption."""

from __future__ import annotations

import cvxpy
import numpy as np
import pytest

from recon.errors import InputError
from recon.priors import Frame, NonNegative, TotalVariation, WaveletSparsity
from recon.solvers import ADMM, Problem, Reason, Stopping, Weighted, solve
from tests.problems import small_quadratic

PRIORS = {
    "wavelet": (WaveletSparsity("haar", 2),),
    "total variation, non-negative": (TotalVariation(), NonNegative()),
    "joint total variation": (TotalVariation(joint=True),),
}


def bound(priors, quadratic, voxel=(1e-6, 1e-6, 1e-6)):
    frame = Frame(quadratic.shape, voxel, np.ones(quadratic.shape[0]))
    return tuple(prior.on(frame) for prior in priors)


def matrix_of(apply, shape):
    """A linear map as a matrix, column by column."""
    columns = [apply(e.reshape(shape)).ravel() for e in np.eye(int(np.prod(shape)))]
    return np.array(columns).T


@pytest.mark.parametrize("name", PRIORS)
def test_optimum_against_cvxpy(name):
    """Objective within 1e-5 of the optimum of a general convex solver, G built by columns."""
    quadratic, _, _ = small_quadratic()
    terms, weight = bound(PRIORS[name], quadratic), 1.0
    problem = Problem(quadratic, tuple(Weighted(term, weight) for term in terms))
    solution = solve(problem, ADMM(), Stopping(1e-5, limit=2000))
    assert solution.reason is Reason.CONVERGED

    shape = quadratic.shape
    G = matrix_of(lambda e: quadratic.normal(e.astype(np.float32)).astype(float), shape)
    values, vectors = np.linalg.eigh(0.5 * (G + G.T))
    root = np.sqrt(np.maximum(values, 0))[:, None] * vectors.T
    x = cvxpy.Variable(int(np.prod(shape)))
    b = quadratic.linear.ravel().astype(float)
    cost = 0.5 * cvxpy.sum_squares(root @ x) - b @ x
    D = matrix_of(terms[0].analyse, shape)
    image = D @ x
    if name == "wavelet":
        detail = np.ones(shape, bool)
        detail[..., : shape[-2] >> 2, : shape[-1] >> 2] = False
        cost += weight * cvxpy.norm1(image[np.flatnonzero(detail.ravel())])
    elif "joint" in name:
        vectors = cvxpy.reshape(image, (6, D.shape[0] // 6), order="C")
        cost += weight * cvxpy.sum(cvxpy.norm(vectors, axis=0))
    else:
        half = D.shape[0] // 2
        for part in (image[:half], image[half:]):
            vectors = cvxpy.reshape(part, (3, half // 3), order="C")
            cost += weight * cvxpy.sum(cvxpy.norm(vectors, axis=0))
    limits = [x >= 0] if len(terms) > 1 else []
    reference = cvxpy.Problem(cvxpy.Minimize(cost), limits)
    reference.solve(solver=cvxpy.CLARABEL)
    optimum = reference.value + 0.5 * quadratic.energy
    scale = 0.5 * quadratic.energy
    assert problem.objective(solution.x) - optimum < 1e-5 * scale
    assert optimum - problem.objective(solution.x) < 1e-5 * scale


def test_resumed_run_equals_an_unbroken_one():
    quadratic, _, _ = small_quadratic()
    problem = Problem(
        quadratic, tuple(Weighted(t, 1.0) for t in bound(PRIORS["wavelet"], quadratic))
    )
    whole = solve(problem, ADMM(), Stopping(0.0, limit=4))
    half = solve(problem, ADMM(), Stopping(0.0, limit=2))
    rest = solve(problem, ADMM(), Stopping(0.0, limit=2), state=half.state)
    np.testing.assert_array_equal(rest.x, whole.x)
    assert rest.reason is Reason.LIMIT


def test_interruption_keeps_the_last_whole_state():
    quadratic, _, _ = small_quadratic()
    problem = Problem(
        quadratic, tuple(Weighted(t, 1.0) for t in bound(PRIORS["wavelet"], quadratic))
    )

    def watch(iteration, residuals):
        if iteration == 3:
            raise KeyboardInterrupt

    stopped = solve(problem, ADMM(), Stopping(0.0, limit=10), watch=watch)
    assert stopped.reason is Reason.INTERRUPTED
    expected = solve(problem, ADMM(), Stopping(0.0, limit=3))
    np.testing.assert_array_equal(stopped.x, expected.x)


def test_precision_stays_single():
    quadratic, _, _ = small_quadratic(real=False)
    problem = Problem(
        quadratic, tuple(Weighted(t, 1.0) for t in bound(PRIORS["wavelet"], quadratic))
    )
    solution = solve(problem, ADMM(), Stopping(0.0, limit=7))
    assert solution.x.dtype == np.complex64
    assert all(part.dtype == np.complex64 for part in solution.state.u + solution.state.d)


def test_history_and_misfit():
    quadratic, _, _ = small_quadratic()
    problem = Problem(
        quadratic, tuple(Weighted(t, 0.7) for t in bound(PRIORS["wavelet"], quadratic))
    )
    solution = solve(problem, ADMM(), Stopping(1e-4, limit=500), with_objective=True)
    history = solution.history
    assert len(history) == len(history.objective) == len(history.seconds)
    assert max(history.primal[-1], history.dual[-1]) < 1e-4
    assert min(history.objective) >= history.objective[-1] - 1e-4 * abs(history.objective[-1])
    assert solution.misfit == pytest.approx(1.0, abs=0.1)


@pytest.mark.parametrize("make", [lambda: ADMM(over_relaxation=2.0), lambda: Stopping(-1.0)])
def test_senseless_settings_are_refused(make):
    with pytest.raises(InputError):
        make()
