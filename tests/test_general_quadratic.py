"""The general data term: its values, and its steps against dense solves."""

from __future__ import annotations

import numpy as np
import pytest

from recon.errors import InputError
from recon.forward import BlockQuadratic, accumulate
from recon.forward.channels import Channels, LayerDensity
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.general_statistics import gather
from recon.forward.off_lattice import calibrated
from recon.grid import Grid
from recon.solvers.conjugate_gradients import ConjugateGradients
from recon.solvers.general import GeneralQuadratic, GradientStep, MajorisedStep
from recon.solvers.loop import Reason, Stopping, solve
from recon.solvers.problem import Problem
from recon.symbol import Symbol
from tests.cases import BASES, NOISE, Case, instrument, protocol
from tests.dense_general import dense_general

GRID = Grid((2, 8, 8), (1e-6, 1e-6, 1e-6))
TALL = Grid((2, 16, 8), (1e-6, 1e-6, 1e-6))
WIDE = Grid((2, 12, 12), (1e-6, 1e-6, 1e-6))
SHEAR = np.array([[1.03, 0.02, 0], [-0.05, 0.98, 0], [0, 0, 1.0]])
RIDGE = 0.03


def case(grid=GRID, off=False, shots=14, seed=1):
    table = protocol(GRID, True, False, (1,), shots, seed)
    table = calibrated(table, SHEAR) if off else table
    return Case("", grid, instrument(grid=GRID), table, BASES["decays"])


def clusters():
    dead = np.zeros((8, 8), bool)
    dead[2:4, 3] = dead[6, 5:7] = True
    return dead


def realities():
    """Names, cases, arguments of the model, arguments of the dense matrix, channel weights."""
    rng = np.random.default_rng(0)
    ideal = Channels.ideal((8, 8))
    gain = rng.uniform(0.7, 1, (8, 8)) * np.exp(1j * rng.uniform(-1, 1, (8, 8)))
    noise = rng.uniform(0.7, 1.5, (8, 8))
    density = rng.uniform(0.7, 1.3, (8, 8))
    courses = np.stack([BASES["decays"] * np.exp(-0.1 * j) for j in range(14)])
    everything = {
        "channels": ideal.without(clusters()).with_gain(gain),
        "layer": LayerDensity(rng.uniform(0.8, 1.2, (12, 12))),
        "margin": (2, 2),
    }
    dense = {"gain": gain, "density": everything["layer"].density, "margin": (2, 2)}
    return [
        ("dead", case(), {"channels": ideal.without(clusters())}, {}, ~clusters()),
        ("gain", case(), {"channels": ideal.with_gain(gain)}, {"gain": gain}, 1),
        ("noise", case(), {"channels": ideal.with_noise(noise)}, {}, 1 / noise**2),
        ("layer", case(), {"layer": LayerDensity(density)}, {"density": density}, 1),
        ("times", case(), {"courses": courses}, {"courses": courses}, 1),
        ("off lattice", case(off=True), {}, {}, 1),
        ("wide", case(TALL), {"margin": (4, 0)}, {"margin": (4, 0)}, 1),
        ("all", case(WIDE, off=True), everything, dense, ~clusters()),
    ]


REALITIES = realities()
NAMES = [entry[0] for entry in REALITIES]


class Dense:
    """The same problem as a matrix, in units of the quadratic."""

    def __init__(self, reality, real, seed=0):
        _, example, arguments, dense, weight = reality
        rng = np.random.default_rng(seed)
        matrix = dense_general(example, **dense)
        x = rng.standard_normal(matrix.shape[1])
        y = matrix @ x
        y *= NOISE / np.abs(y).std()
        y = y + NOISE * (rng.standard_normal(y.shape) + 1j * rng.standard_normal(y.shape))
        shape = (len(example.protocol), len(example.basis), 8, 8)
        shots = np.asarray(example.protocol.averages)[:, None, None, None] / NOISE**2
        self.root = np.sqrt(np.broadcast_to(shots * np.broadcast_to(weight, (8, 8)), shape)).ravel()
        model = GeneralModel.build(
            example.grid, example.instrument, example.protocol, example.basis, NOISE, **arguments
        )
        operator = GeneralOperator(model)
        samples = y.reshape(shape)
        statistics = gather(operator, [(slice(0, 6), samples[:6]), (slice(6, 14), samples[6:])])
        plain = GeneralQuadratic(operator, statistics, real)
        self.voxel = example.grid.voxel
        self.unit = 1 / np.sqrt(plain.diagonal().mean(axis=1))
        self.quadratic = plain.scaled(self.unit)
        scale = np.repeat(self.unit, example.grid.size)
        self.matrix, self.y = self.root[:, None] * matrix * scale, self.root * y
        self.normal = self.matrix.conj().T @ self.matrix
        self.b = self.matrix.conj().T @ self.y
        if real:
            self.normal, self.b = self.normal.real, self.b.real

    def ridge(self, weight):
        x = np.linalg.solve(self.normal + weight * np.eye(len(self.b)), self.b)
        return x.reshape(self.quadratic.shape)


def error(found, expected):
    return np.linalg.norm(found.ravel() - expected.ravel()) / np.linalg.norm(expected)


@pytest.mark.parametrize("real", [False, True], ids=["complex", "real"])
@pytest.mark.parametrize("reality", REALITIES, ids=NAMES)
def test_data_term_equals_dense(reality, real):
    dense = Dense(reality, real)
    quadratic = dense.quadratic
    rng = np.random.default_rng(3)
    x = rng.standard_normal(quadratic.shape) + (0 if real else 1j) * rng.standard_normal(
        quadratic.shape
    )
    x = x.astype(quadratic.dtype)
    residual = dense.y - dense.matrix @ x.ravel()
    assert quadratic.value(x) == pytest.approx(0.5 * np.vdot(residual, residual).real, rel=1e-4)
    assert error(quadratic.normal(x), dense.normal @ x.ravel()) < 1e-5
    assert error(quadratic.linear, dense.b) < 1e-5
    assert error(quadratic.gradient(x), dense.normal @ x.ravel() - dense.b) < 1e-4
    used = np.count_nonzero(dense.root)
    assert quadratic.misfit(x) == pytest.approx(np.vdot(residual, residual).real / used, rel=1e-4)
    top = np.linalg.eigvalsh(dense.normal)[-1]
    assert top * 0.999 <= quadratic.largest <= 3 * top


@pytest.mark.parametrize("real", [False, True], ids=["complex", "real"])
@pytest.mark.parametrize("reality", REALITIES, ids=NAMES)
def test_conjugate_gradients_reach_the_dense_solution_in_thirty_iterations(reality, real):
    dense = Dense(reality, real)
    step = GradientStep(Stopping(tolerance=0, limit=30)).step(dense.quadratic, Symbol(RIDGE))
    assert error(step(dense.quadratic.linear), dense.ridge(RIDGE)) < 1e-3


def test_preconditioner_is_hermitian_and_positive():
    dense = Dense(REALITIES[-1], real=False)
    graded = dense.quadratic.graded.step(Symbol(RIDGE))
    rng = np.random.default_rng(0)
    a, b = (
        (rng.standard_normal(dense.quadratic.shape) + 1j).astype(np.complex64) for _ in range(2)
    )
    left, right = np.vdot(a, graded(b)), np.vdot(graded(a), b)
    assert left == pytest.approx(right, rel=1e-4)
    assert np.vdot(a, graded(a)).real > 0


@pytest.mark.parametrize("name", ["dead", "gain", "noise", "wide"])
def test_filling_in_descends_to_the_dense_solution(name):
    """Majorise–minimise never raises the objective, and its fixed point is the solution."""
    dense = Dense(REALITIES[NAMES.index(name)], real=True)
    quadratic, expected = dense.quadratic, dense.ridge(RIDGE)
    step = MajorisedStep().step(quadratic, Symbol(RIDGE))
    x, objectives, errors = None, [], []
    for _ in range(60):
        x = step(quadratic.linear, x)
        objectives.append(quadratic.value(x) + 0.5 * RIDGE * float(np.vdot(x, x)))
        errors.append(error(x, expected))
    assert (np.diff(objectives) <= 1e-5 * abs(objectives[0])).all()
    assert errors[-1] < 0.7 * errors[0]
    fixed = step(quadratic.linear, expected.astype(np.float32))
    assert error(fixed, expected) < 1e-4


def test_filling_in_refuses_what_has_no_majoriser():
    dense = Dense(REALITIES[NAMES.index("layer")], real=True)
    with pytest.raises(InputError, match="conjugate gradients"):
        MajorisedStep().step(dense.quadratic, Symbol(1.0))


def test_warm_start_saves_iterations():
    dense = Dense(REALITIES[0], real=True)
    step = GradientStep(Stopping(tolerance=0, limit=3)).step(dense.quadratic, Symbol(RIDGE))
    expected = dense.ridge(RIDGE)
    near = (expected * 1.01).astype(np.float32)
    b = dense.quadratic.linear
    assert error(step(b, near), expected) < 0.1 * error(step(b), expected)


def test_ideal_measurement_has_the_ideal_data_term():
    example = case()
    model = GeneralModel.build(
        example.grid, example.instrument, example.protocol, example.basis, NOISE
    )
    operator = GeneralOperator(model)
    rng = np.random.default_rng(0)
    y = NOISE * rng.standard_normal(operator.sample_shape)
    general = GeneralQuadratic(operator, gather(operator, [(slice(0, 14), y)]))
    ideal = BlockQuadratic(accumulate(example.model, [(slice(0, 14), y)]))
    x = (rng.standard_normal(general.shape) * 1e-3).astype(np.complex64)
    assert error(general.normal(x), ideal.normal(x)) < 1e-5
    assert error(general.linear, ideal.linear) < 1e-5
    assert general.energy == pytest.approx(ideal.energy, rel=1e-5)
    assert general.largest == pytest.approx(ideal.largest, rel=1e-3)
    np.testing.assert_allclose(general.diagonal(), ideal.diagonal(), rtol=1e-3)


def test_loop_drives_conjugate_gradients_and_goes_on_exactly():
    """The method of the loop: why it stopped, and 2 + 2 iterations equal 4, bit for bit."""
    quadratic = Dense(REALITIES[0], real=True).quadratic
    problem, method = Problem(quadratic, ()), ConjugateGradients(Symbol(RIDGE))
    solution = solve(problem, method, Stopping(tolerance=1e-4))
    assert solution.reason is Reason.CONVERGED
    four = solve(problem, method, Stopping(tolerance=0, limit=4))
    assert four.reason is Reason.LIMIT
    two = solve(problem, method, Stopping(tolerance=0, limit=2))
    again = solve(problem, method, Stopping(tolerance=0, limit=2), state=two.state.copy())
    assert np.array_equal(again.x, four.x)


def test_dead_channels_may_hold_anything_and_others_may_not():
    example = case()
    dead = clusters()
    channels = Channels.ideal((8, 8)).without(dead)
    arguments = (example.grid, example.instrument, example.protocol, example.basis, NOISE)
    operator = GeneralOperator(GeneralModel.build(*arguments, channels=channels))
    y = np.ones(operator.sample_shape, np.complex64)
    y[..., dead] = np.nan
    statistics = gather(operator, [(slice(0, 14), y)])
    assert np.isfinite(statistics.linear).all() and np.isfinite(statistics.energy)
    y[3, :, 0, 0] = np.inf
    with pytest.raises(InputError, match="shot 3"):
        gather(operator, [(slice(0, 14), y)])
