"""Outlier channels: the reweighted solution against a general convex solver."""

from __future__ import annotations

import cvxpy
import numpy as np
import pytest

from recon.forward.channels import Channels
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.general_statistics import channel_residuals, gather
from recon.grid import Grid
from recon.solvers.general import GeneralQuadratic, GradientStep
from recon.solvers.loop import Reason, Stopping
from recon.solvers.robust import Trust, solve_with_trust
from recon.symbol import Symbol
from tests.cases import BASES, NOISE, Case, instrument, protocol
from tests.dense_general import dense_general

GRID = Grid((1, 6, 6), (1e-6, 1e-6, 1e-6))
RIDGE = 0.05
BAD = [(1, 2), (4, 4)]


def problem():
    """A small record with two channels that report nonsense."""
    table = protocol(GRID, True, False, (1,), 10)
    example = Case("", GRID, instrument(grid=GRID), table, BASES["decays"])
    model = GeneralModel.build(GRID, example.instrument, table, example.basis, NOISE)
    operator = GeneralOperator(model)
    rng = np.random.default_rng(0)
    matrix = dense_general(example)
    x = rng.standard_normal(matrix.shape[1])
    y = matrix @ x
    x, y = x * NOISE / np.abs(y).std(), y * NOISE / np.abs(y).std()
    noise = rng.standard_normal((2, *operator.sample_shape)) * NOISE * np.sqrt(0.5)
    noise = noise / np.sqrt(table.averages)[:, None, None, None]
    samples = y.reshape(operator.sample_shape) + noise[0] + 1j * noise[1]
    for row, column in BAD:
        samples[..., row, column] += 20 * NOISE * np.exp(2j * np.arange(10))[:, None]
    return example, matrix, operator, samples, x


def solver(quadratic, start):
    step = GradientStep(Stopping(tolerance=1e-6, limit=60)).step(quadratic, Symbol(RIDGE))
    return step(quadratic.linear, start)


def test_equals_general_convex_solver():
    """Huber's cost on channel norms as min ½‖r − o‖² + t Σ_c ‖o_c‖ (infimal convolution), cvxpy."""
    example, matrix, operator, samples, _ = problem()
    plain = GeneralQuadratic(operator, gather(operator, [(slice(0, 10), samples)]), real=True)
    unit = 1 / np.sqrt(plain.diagonal().mean(axis=1))
    settings = Trust(threshold=1.5, tolerance=1e-5, limit=30)
    found = solve_with_trust(
        plain.scaled(unit), lambda: [(slice(0, 10), samples)], solver, settings
    )
    assert found.reason is Reason.CONVERGED

    root = np.sqrt(np.asarray(example.protocol.averages) / NOISE**2)[:, None, None, None]
    root = np.broadcast_to(root, samples.shape).ravel()
    scaled = root[:, None] * matrix * np.repeat(unit, GRID.size)
    both = np.concatenate([scaled.real, scaled.imag])
    y = root * samples.ravel()
    y = np.concatenate([y.real, y.imag])
    channel = np.tile(np.arange(36), len(y) // 36)
    x, outlier = cvxpy.Variable(both.shape[1]), cvxpy.Variable(len(y))
    order = np.argsort(channel, kind="stable")
    groups = cvxpy.reshape(outlier[order], (len(y) // 36, 36), order="F")
    threshold = 1.5 * np.sqrt(len(y) / 2 / 36)
    cost = 0.5 * cvxpy.sum_squares(y - both @ x - outlier)
    cost += threshold * cvxpy.sum(cvxpy.norm(groups, 2, axis=0))
    cvxpy.Problem(cvxpy.Minimize(cost + 0.5 * RIDGE * cvxpy.sum_squares(x))).solve("CLARABEL")
    difference = np.linalg.norm(found.x.ravel() - x.value) / np.linalg.norm(x.value)
    assert difference < 1e-3


def test_finds_the_bad_channels_and_halves_the_error():
    _, _, operator, samples, truth = problem()
    plain = GeneralQuadratic(operator, gather(operator, [(slice(0, 10), samples)]), real=True)
    unit = 1 / np.sqrt(plain.diagonal().mean(axis=1))
    quadratic = plain.scaled(unit)
    found = solve_with_trust(quadratic, lambda: [(slice(0, 10), samples)], solver)
    worst = np.argwhere(found.trust < 0.2)
    assert {tuple(one) for one in worst} == set(BAD)
    scale = unit[:, None, None, None]
    truth = truth.reshape(quadratic.shape)
    error = np.linalg.norm(found.x * scale - truth)
    naive = np.linalg.norm(solver(quadratic, None) * scale - truth)
    assert error < 0.5 * naive


def test_channel_residuals_of_the_truth_are_one():
    """χ²: 20 shots·times of complex samples per channel, five standard errors of the mean."""
    _, _, operator, samples, truth = problem()
    good = np.ones((6, 6), bool)
    good[tuple(np.transpose(BAD))] = False
    residual = channel_residuals(
        operator, truth.reshape(operator.object_shape), [(slice(0, 10), samples)]
    )
    count = 40 * good.sum()
    assert (residual[good] ** 2).mean() == pytest.approx(1, abs=5 / np.sqrt(count))
    assert residual[1, 2] > 10
    dead = operator.with_channels(Channels.ideal((6, 6)).without(~good))
    residual = channel_residuals(
        dead, truth.reshape(operator.object_shape), [(slice(0, 10), samples)]
    )
    assert (residual[~good] == 0).all()
