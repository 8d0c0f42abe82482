"""A against a dense matrix from direct sums, its adjoint, and its blocks, case by case."""

from __future__ import annotations

import numpy as np
import pytest

from recon.forward import BlockQuadratic, ForwardOperator, accumulate, normal
from recon.forward.normal import normal_blocks
from recon.symbol import Symbol
from tests.cases import NOISE, registry
from tests.dense import dense_matrix

CASES = registry()
IDS = [case.name for case in CASES]


def random_pair(operator, seed=0):
    rng = np.random.default_rng(seed)

    def draw(shape):
        return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)

    return draw(operator.object_shape), draw(operator.sample_shape)


@pytest.mark.parametrize("case", CASES, ids=IDS)
def test_equals_dense_matrix(case):
    operator = ForwardOperator(case.model, np.complex128)
    x, y = random_pair(operator)
    dense = dense_matrix(case)
    if not case.protocol.sensor_wavevector.any() and case.instrument.one_detector:
        assert np.abs(dense).max() == 0  # κ = 0 only: one detector without sensor gradient is blind
        assert not operator.apply(x).any()
        return
    expected = dense @ x.ravel()
    assert np.linalg.norm(operator.apply(x).ravel() - expected) < 1e-9 * np.linalg.norm(expected)
    back = dense.conj().T @ y.ravel()
    assert np.linalg.norm(operator.adjoint(y).ravel() - back) < 1e-9 * np.linalg.norm(back)


@pytest.mark.parametrize("dtype, bound", [(np.complex64, 1e-6), (np.complex128, 1e-12)])
@pytest.mark.parametrize("case", CASES, ids=IDS)
def test_adjoint_identity(case, dtype, bound):
    operator = ForwardOperator(case.model, dtype)
    x, y = (part.astype(dtype) for part in random_pair(operator))
    forward, back = operator.apply(x), operator.adjoint(y)
    assert forward.dtype == back.dtype == dtype
    left, right = np.vdot(forward.astype(complex), y), np.vdot(x, back.astype(complex))
    assert abs(left - right) <= bound * np.linalg.norm(forward) * np.linalg.norm(y) + 1e-300


@pytest.mark.parametrize("real", [False, True], ids=["complex", "real"])
@pytest.mark.parametrize("case", CASES, ids=IDS)
def test_blocks_are_exact(case, real):
    """G x, b, the value and the shifted inverse equal what the operator itself gives."""
    model = case.model
    operator = ForwardOperator(model, np.complex128)
    x, y = random_pair(operator)
    y = y * NOISE
    statistics = accumulate(model, [(slice(0, 2), y[:2]), (slice(2, 5), y[2:])])
    quadratic = BlockQuadratic(statistics, real)
    x = (x.real if real else x) * 1e-3
    weight = model.encoding.weight[:, None, None, None]
    residual = y - operator.apply(x.astype(complex))
    value = 0.5 * np.sum(weight * np.abs(residual) ** 2)
    assert quadratic.value(x.astype(quadratic.dtype)) == pytest.approx(value, rel=1e-5)
    normal = operator.adjoint(weight * operator.apply(x.astype(complex)))
    normal = normal.real if real else normal
    scale = np.linalg.norm(normal)
    assert np.linalg.norm(quadratic.normal(x.astype(quadratic.dtype)) - normal) <= 1e-5 * scale

    rng = np.random.default_rng(2)
    lateral = rng.uniform(0.5, 1, model.grid.shape[1:])
    lateral = lateral + np.roll(lateral[::-1, ::-1], 1, (0, 1))
    axial = np.cov(rng.standard_normal((model.grid.shape[0], 9)))
    size = max(quadratic.largest, 1e-3)
    symbol = Symbol(lateral * size, axial * size)
    solved = quadratic.step(symbol)(x.astype(quadratic.dtype))
    spectrum = np.fft.fft2(solved) * lateral * size
    again = np.fft.ifft2(spectrum) + size * np.einsum("zw,rwyx->rzyx", axial, solved)
    again = quadratic.normal(solved) + (again.real if real else again)
    assert np.linalg.norm(again - x) < 2e-4 * np.linalg.norm(x)


def test_statistics_of_separate_shots_add():
    case = CASES[0]
    operator = ForwardOperator(case.model, np.complex128)
    _, y = random_pair(operator)
    whole = accumulate(case.model, [(slice(0, 5), y)])
    parts = []
    for shots in ([0, 1], [2, 3, 4]):
        model = case.model.subset(np.array(shots))
        parts.append(accumulate(model, [(slice(0, len(shots)), y[shots])]))
    together = parts[0] + parts[1]
    assert together.samples == whole.samples
    assert together.energy == pytest.approx(whole.energy)
    np.testing.assert_allclose(
        together.linear, whole.linear, rtol=1e-4, atol=1e-6 * np.abs(whole.linear).max()
    )
    np.testing.assert_allclose(
        together.normal, whole.normal, rtol=1e-4, atol=1e-6 * np.abs(whole.normal).max()
    )


def test_many_shots_by_convolution_equal_few_by_slices(monkeypatch):
    """Two ways to sum shifted products of responses; the second is checked against A above."""
    case = CASES[4]
    operator = ForwardOperator(case.model)
    _, slices = normal_blocks(operator)
    monkeypatch.setattr(normal, "MANY", 0)
    _, convolved = normal_blocks(operator)
    assert np.abs(convolved - slices).max() <= 1e-6 * np.abs(slices).max()
