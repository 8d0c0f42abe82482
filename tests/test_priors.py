"""Each prior: adjoint, normal operator, and prox against cvxpy or brute force."""

from __future__ import annotations

import cvxpy
import numpy as np
import pytest

from recon.errors import InputError
from recon.priors import Box, Frame, NonNegative, TotalVariation, WaveletSparsity
from recon.priors.base import group_soft_threshold, soft_threshold

SHAPE = (2, 3, 8, 12)
VOXEL = (3e-6, 1e-6, 2e-6)
FRAME = Frame(SHAPE, VOXEL, np.array([2.0, 5.0]))
MAPS = [
    WaveletSparsity("db2", 1),
    WaveletSparsity("db4", 3),
    WaveletSparsity("haar", 2),
    TotalVariation(),
    TotalVariation(joint=True),
    NonNegative(),
]


def draw(shape, dtype, seed):
    rng = np.random.default_rng(seed)
    values = rng.standard_normal(shape)
    if np.dtype(dtype).kind == "c":
        values = values + 1j * rng.standard_normal(shape)
    return values.astype(dtype)


@pytest.mark.parametrize("dtype", [np.float64, np.complex128, np.float32, np.complex64])
@pytest.mark.parametrize("prior", MAPS, ids=str)
def test_adjoint_and_symbol(prior, dtype):
    """⟨Dx, u⟩ = ⟨x, Dᴴu⟩, DᴴD is the symbol, and no precision is gained or lost."""
    term = prior.on(FRAME)
    x = draw(SHAPE, dtype, 0)
    image = term.analyse(x)
    u = draw(image.shape, dtype, 1)
    back = term.adjoint(u)
    assert image.dtype == back.dtype == dtype
    bound = 1e-5 if np.dtype(dtype).itemsize in (4,) or dtype == np.complex64 else 1e-12
    scale = np.linalg.norm(image) * np.linalg.norm(u)
    assert abs(np.vdot(image, u) - np.vdot(x, back)) <= bound * scale
    normal = term.adjoint(image)
    symbol = term.symbol
    expected = np.fft.ifft2(np.fft.fft2(x) * symbol.lateral)
    if symbol.axial is not None:
        expected = expected + np.einsum("zw,cwyx->czyx", symbol.axial, x)
    assert np.linalg.norm(normal - expected) <= bound * np.linalg.norm(expected)


@pytest.mark.parametrize("wavelet", ["db4", "haar"])
def test_wavelet_is_orthogonal(wavelet):
    term = WaveletSparsity(wavelet, 2).on(FRAME)
    u = draw(SHAPE, float, 3)
    np.testing.assert_allclose(term.analyse(term.adjoint(u)), u, atol=1e-12)


def test_wavelet_leaves_the_coarse_plane_free():
    """A constant costs nothing and is not shrunk."""
    term = WaveletSparsity("db4", 2).on(FRAME)
    x = np.full(SHAPE, 3.0)
    u = term.analyse(x)
    assert term.value(u) == pytest.approx(0, abs=1e-10)
    np.testing.assert_allclose(term.adjoint(term.prox(u, 10.0)), x, atol=1e-10)


def test_total_variation_counts_edges_in_units_of_the_lateral_edge():
    """A step of height h across one voxel face costs h · unit/edge, by hand."""
    term = TotalVariation().on(Frame((1, 2, 4, 4), VOXEL, np.ones(1)))
    x = np.zeros((1, 2, 4, 4))
    x[0, 1] = 5.0
    unit = np.sqrt(VOXEL[1] * VOXEL[2])
    assert term.value(term.analyse(x)) == pytest.approx(16 * 5.0 * unit / VOXEL[0])


@pytest.mark.parametrize("prior", MAPS[:5], ids=str)
def test_prox_against_cvxpy(prior):
    """argmin ½‖v − u‖² + s R(v) by a general convex solver (cvxpy)."""
    term = prior.on(Frame((2, 2, 8, 8), VOXEL, np.ones(2)))
    u = draw(term.analyse(np.zeros((2, 2, 8, 8))).shape, float, 4) * 2
    step = 0.7
    v = cvxpy.Variable(u.size)
    if isinstance(prior, WaveletSparsity):
        free = np.zeros(u.shape, bool)
        free[..., : 8 >> term._levels, : 8 >> term._levels] = True
        cost = cvxpy.norm1(v[np.flatnonzero(~free.ravel())])
    elif prior.joint:
        cost = cvxpy.sum(cvxpy.norm(cvxpy.reshape(v, (6, u.size // 6), order="C"), axis=0))
    else:
        parts = [
            cvxpy.norm(cvxpy.reshape(v, (2, 3, u.size // 6), order="C")[c], axis=0)
            for c in range(2)
        ]
        cost = sum(cvxpy.sum(part) for part in parts)
    problem = cvxpy.Problem(cvxpy.Minimize(0.5 * cvxpy.sum_squares(v - u.ravel()) + step * cost))
    problem.solve(solver=cvxpy.CLARABEL)
    np.testing.assert_allclose(term.prox(u, step).ravel(), v.value, atol=3e-4)


@pytest.mark.parametrize("joint", [False, True])
def test_complex_shrinkage_against_brute_force(joint):
    """The least value over a fine polar grid of candidates."""
    u = np.array([1.3 * np.exp(0.4j)])
    got = group_soft_threshold(u[None], 0.5)[0] if joint else soft_threshold(u, 0.5)
    radius, angle = np.meshgrid(np.linspace(0, 2, 801), np.linspace(0, 2 * np.pi, 721))
    v = radius * np.exp(1j * angle)
    best = v.ravel()[np.argmin(0.5 * np.abs(v - u) ** 2 + 0.5 * radius)]
    assert abs(got[0] - best) < 1e-2


def test_bounds_are_in_the_unknowns_own_unit():
    term = Box(1.0, 10.0).on(FRAME)
    clipped = term.prox(draw(SHAPE, np.float32, 5) * 9, 1.0)
    assert clipped.dtype == np.float32
    assert clipped[0].min() == pytest.approx(0.5)
    assert clipped[0].max() == pytest.approx(5.0)
    assert clipped[1].min() == pytest.approx(0.2)
    assert term.value(clipped) == 0
    assert term.value(clipped - 1) == np.inf


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: WaveletSparsity("bior4.4").on(FRAME), "not orthogonal"),
        (lambda: WaveletSparsity("none").on(FRAME), "no discrete wavelet"),
        (lambda: WaveletSparsity().on(Frame((1, 1, 7, 8), VOXEL, np.ones(1))), "cannot be halved"),
        (lambda: Box(2.0, 1.0), "exceeds"),
        (lambda: NonNegative().on(FRAME).prox(draw(SHAPE, np.complex64, 0), 1.0), "real unknown"),
    ],
)
def test_refusals_are_one_line(make, says):
    with pytest.raises(InputError, match=says) as caught:
        make()
    assert "\n" not in str(caught.value)
