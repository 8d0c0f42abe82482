"""Replicas, point responses and the discrepancy rule."""

from __future__ import annotations

import numpy as np
import pytest

from recon.priors import Frame, TotalVariation
from recon.solvers import ADMM, Problem, Stopping, Weighted, solve
from recon.solvers.penalised import Penalised
from recon.solvers.replicas import Replicas, Scatter
from recon.solvers.resolution import PointResponse, full_width, resting_on_prior
from recon.solvers.ridge import Ridge
from recon.solvers.weight import Discrepancy, Fixed
from recon.symbol import Symbol
from tests.problems import small_quadratic

EDGES = (3e-6, 1e-6, 2e-6)


def frame_of(quadratic):
    return Frame(quadratic.shape, EDGES, np.ones(quadratic.shape[0]))


def test_full_width_of_known_curves():
    """A Gaussian's is 2√(2 ln 2) σ, a triangle's half its base; an end counts as mirrored."""
    x = np.arange(101.0) - 50
    assert full_width(np.exp(-0.5 * (x / 6) ** 2), 50) == pytest.approx(6 * 2.3548, rel=2e-3)
    triangle = np.maximum(1 - np.abs(x) / 8, 0)
    assert full_width(triangle, 50) == pytest.approx(8)
    assert full_width(triangle[50:], 0) == pytest.approx(8)
    assert np.isnan(full_width(triangle, 40))
    assert full_width(np.ones(5), 2) == np.inf


@pytest.mark.parametrize("real", [True, False])
def test_ridge_response_is_the_dense_one(real):
    """(G + λ)⁻¹ G with G built from the whitened dense model, its columns read off directly."""
    quadratic, _, (_, operator, unit, _) = small_quadratic(real)
    weight, shape = 0.05, quadratic.shape
    columns = []
    for e in np.eye(int(np.prod(shape))):
        amounts = e.reshape(shape) * unit[:, None, None, None]
        samples = operator.apply(amounts.astype(complex))
        columns.append(samples * np.sqrt(operator.model.encoding.weight)[:, None, None, None])
    A = np.array(columns).reshape(len(columns), -1).T
    G = A.conj().T @ A
    G = G.real if real else G
    whole = np.linalg.solve(G + weight * np.eye(len(G)), G).real
    measured = PointResponse(spacing=8).measure(quadratic, EDGES, quadratic.step(Symbol(weight)))
    component, depth, y, x = 1, 1, 4, 4
    place = np.ravel_multi_index((component, depth, y, x), shape)
    response = whole[:, place].reshape(shape)[component]
    expected = full_width(response[depth, :, x], y) * EDGES[1]
    assert measured.width[component, depth, 1] == pytest.approx(expected, rel=1e-3)
    assert measured.recovered[component, depth] == pytest.approx(response[depth].sum(), rel=1e-3)


def test_penalised_responses_against_cold_solves():
    """Warm starts of a few iterations against full solves with and without the point."""
    quadratic, _, _ = small_quadratic()
    priors = (TotalVariation(),)
    points = PointResponse(spacing=8)
    settings = Penalised(priors, weight=Fixed(0.3), replicas=Replicas(8), resolution=points)
    found = settings.estimate(quadratic, frame_of(quadratic))
    assert (found.standard_error > 0).all()
    assert "bias" in found.remarks[0]

    (term,) = (prior.on(frame_of(quadratic)) for prior in priors)

    def cold(b):
        problem = Problem(quadratic.with_linear(b), (Weighted(term, 0.3),))
        return solve(problem, ADMM(), Stopping(1e-5, limit=2000)).x

    expected = points.measure(quadratic, EDGES, cold).width
    assert found.resolution.shape == (*quadratic.shape[:2], 3)
    both = np.isfinite(expected) & np.isfinite(found.resolution)
    assert both.mean() > 0.5
    off = np.abs(found.resolution[both] / expected[both] - 1)
    assert np.median(off) < 0.03
    assert off.max() < 0.3


def test_pinned_voxels_borrow_their_neighbours_error():
    deviation = np.ones((1, 1, 8, 8), np.float32)
    deviation[0, 0, 3, 3] = 0
    error = Scatter(deviation, np.zeros_like(deviation)).standard_error
    assert error[0, 0, 3, 3] == pytest.approx(np.sqrt(24 / 25))
    assert error[0, 0, 0, 0] == pytest.approx(1)


def test_planes_that_rest_on_the_prior_are_named():
    (line,) = resting_on_prior(np.array([[0.9, 0.8, 0.7], [0.9, 0.4, 0.1]]))
    assert "component 2, planes from below 2, 3:" in line


def test_discrepancy_leaves_the_size_of_the_noise():
    """‖b − G x̂‖² against the mean of fresh draws of the noise, within its own scatter."""
    quadratic, _, _ = small_quadratic()
    settings = Penalised((TotalVariation(),), weight=Discrepancy(), replicas=None, resolution=None)
    found = settings.estimate(quadratic, frame_of(quadratic))
    left = float((quadratic.gradient(found.x) ** 2).sum())
    rng = np.random.default_rng(3)
    draws = [float((quadratic.noise(rng) ** 2).sum()) for _ in range(60)]
    assert abs(left - np.mean(draws)) < 3 * np.std(draws)


def test_ridge_widths_grow_with_depth():
    """The deeper plane is seen less sharply (response exp(−κ z))."""
    quadratic, _, _ = small_quadratic(shots=60)
    found = Ridge(0.02).estimate(quadratic, frame_of(quadratic))
    lateral = found.resolution[..., 1:].mean(axis=(0, 2))
    assert lateral[1] > lateral[0]
