"""Cycle-spun wavelets, total generalised variation, group sparsity, low rank, support."""

from __future__ import annotations

from itertools import product

import cvxpy
import numpy as np
import pytest

from recon.errors import InputError
from recon.priors import (
    Frame,
    LocalLowRank,
    LowRank,
    NonNegative,
    Support,
    TotalGeneralisedVariation,
    TotalVariation,
    UndecimatedWaveletSparsity,
    WaveletSparsity,
)
from recon.solvers import ADMM, Problem, Reason, Stopping, Weighted, solve
from recon.solvers.penalised import Penalised
from recon.solvers.weight import Fixed
from tests.problems import small_quadratic
from tests.test_priors import draw
from tests.test_solvers import bound, matrix_of

SHAPE = (2, 3, 8, 12)
VOXEL = (3e-6, 1e-6, 2e-6)
FRAME = Frame(SHAPE, VOXEL, np.array([2.0, 5.0]))
MASK = draw(SHAPE[1:], float, 9) > 0
LINEAR = [
    UndecimatedWaveletSparsity("db2", 3),
    UndecimatedWaveletSparsity("haar", 2, joint=True),
    UndecimatedWaveletSparsity("bior4.4", 2),
    WaveletSparsity("db2", 1, joint=True),
    TotalGeneralisedVariation(),
    TotalGeneralisedVariation(1.3, joint=True),
    LowRank(),
    LocalLowRank(4, 3),
    Support(MASK),
]


@pytest.mark.parametrize("dtype", [np.float64, np.complex128, np.float32, np.complex64])
@pytest.mark.parametrize("prior", LINEAR, ids=str)
def test_adjoint_and_symbol(prior, dtype):
    """⟨Dx, u⟩ = ⟨x, Dᴴu⟩, DᴴD is the symbol, and no precision is gained or lost."""
    term = prior.on(FRAME)
    x = draw(SHAPE, dtype, 0)
    image = term.analyse(x)
    u = draw(image.shape, dtype, 1)
    back = term.adjoint(u)
    assert image.dtype == back.dtype == term.prox(u, 0.3).dtype == dtype
    tolerance = 1e-5 if dtype in (np.float32, np.complex64) else 1e-12
    scale = np.linalg.norm(image) * np.linalg.norm(u)
    assert abs(np.vdot(image, u) - np.vdot(x, back)) <= tolerance * scale
    normal, expected = term.adjoint(image), term.symbol.apply(x)
    assert np.linalg.norm(normal - expected) <= tolerance * np.linalg.norm(x)


@pytest.mark.parametrize("shape", [(1, 1, 4, 6), (2, 2, 4, 6), (1, 4, 6, 4)])
def test_generalised_variation_at_every_depth(shape):
    """One, two and more planes: the symbol against Dᴴ D."""
    term = TotalGeneralisedVariation().on(Frame(shape, VOXEL, np.ones(shape[0])))
    x = draw(shape, float, 2)
    np.testing.assert_allclose(term.adjoint(term.analyse(x)), term.symbol.apply(x), atol=1e-10)


@pytest.mark.parametrize("prior", [*LINEAR, TotalVariation()], ids=str)
def test_weights_of_planes(prior):
    """Dᴴ P D against its symbol; a prox with one step per plane against one plane at a time."""
    term = prior.on(FRAME)
    planes = np.array([0.3, 1.0, 4.0])
    symbol = term.weighted(planes)
    if symbol is None:
        assert isinstance(prior, LowRank | LocalLowRank | TotalGeneralisedVariation)
        return
    x = draw(SHAPE, float, 8)
    tall = planes[:, None, None]
    expected = term.adjoint(term.analyse(x) * tall)
    np.testing.assert_allclose(symbol.apply(x), expected, atol=1e-10)
    u = draw(term.analyse(x).shape, float, 9)
    got = term.prox(u, 0.4 / tall)
    for plane, weight in enumerate(planes):
        single = term.prox(u, 0.4 / weight)
        np.testing.assert_allclose(got[..., plane, :, :], single[..., plane, :, :])


@pytest.mark.parametrize("wavelet", ["haar", "db2"])
def test_cycle_spinning_is_the_mean_over_shifts(wavelet):
    """Brute force: the orthogonal prior of every circular shift, averaged."""
    x = draw((1, 1, 8, 8), float, 5)
    frame = Frame(x.shape, VOXEL, np.ones(1))
    orthogonal = WaveletSparsity(wavelet, 2).on(frame)
    values = [
        orthogonal.value(orthogonal.analyse(np.roll(x, shift, (-2, -1))))
        for shift in product(range(4), range(4))
    ]
    term = UndecimatedWaveletSparsity(wavelet, 2).on(frame)
    assert term.value(term.analyse(x)) == pytest.approx(np.mean(values))


def cost_of(prior, v, shape):
    """R(v) for cvxpy."""
    flat = cvxpy.reshape(v, (shape[0], v.size // shape[0]), order="C")
    if isinstance(prior, UndecimatedWaveletSparsity):
        size = int(np.prod(shape[1:]))
        weights = [0.5 ** (place // 3 + 1) for place in range(shape[0] - 1)]
        if not prior.joint:
            return sum(w * cvxpy.norm1(flat[i]) for i, w in enumerate(weights))
        return sum(
            w * cvxpy.sum(cvxpy.norm(cvxpy.reshape(flat[i], (2, size // 2), order="C"), axis=0))
            for i, w in enumerate(weights)
        )
    if isinstance(prior, WaveletSparsity):
        free = np.zeros(shape[1:], bool)
        free[..., : shape[-2] // 2, : shape[-1] // 2] = True
        return cvxpy.sum(cvxpy.norm(flat[:, np.flatnonzero(~free.ravel())], axis=0))
    if isinstance(prior, LowRank):
        return cvxpy.normNuc(flat)
    return patches_cost(v, shape, prior.patch) / np.sqrt(prior.tilings)


def patches_cost(v, shape, patch):
    """Nuclear norms of every patch of (tilings, components, nz, ny, nx)."""
    index = np.arange(v.size).reshape(shape)
    tilings, components, _, ny, nx = shape
    total = 0
    for tiling, y, x in product(range(tilings), range(0, ny, patch), range(0, nx, patch)):
        inside = index[tiling, :, :, y : y + patch, x : x + patch].reshape(components, -1)
        total += cvxpy.normNuc(cvxpy.vstack([v[row] for row in inside]))
    return total


@pytest.mark.parametrize(
    "prior",
    [
        UndecimatedWaveletSparsity("db2", 2),
        UndecimatedWaveletSparsity("haar", 2, joint=True),
        WaveletSparsity("db2", 1, joint=True),
        LowRank(),
        LocalLowRank(4, 2),
    ],
    ids=str,
)
def test_prox_and_value_against_cvxpy(prior):
    """argmin ½‖v − u‖² + s R(v), and R at its end, by a general convex solver (cvxpy)."""
    shape = (2, 1, 4, 4) if isinstance(prior, LowRank) else (2, 2, 8, 8)
    term = prior.on(Frame(shape, VOXEL, np.ones(2)))
    u = draw(term.analyse(np.zeros(shape)).shape, float, 4) * 2
    step = 0.7
    v = cvxpy.Variable(u.size)
    cost = cost_of(prior, v, u.shape)
    problem = cvxpy.Problem(cvxpy.Minimize(0.5 * cvxpy.sum_squares(v - u.ravel()) + step * cost))
    problem.solve(solver=cvxpy.CLARABEL)
    got = term.prox(u, step)
    np.testing.assert_allclose(got.ravel(), v.value, atol=1e-3)
    reached = 0.5 * ((got - u) ** 2).sum() + step * term.value(got)
    assert reached == pytest.approx(problem.value, rel=1e-5)


def test_complex_singular_values_shrink():
    """Against numpy's singular value decomposition."""
    term = LowRank().on(FRAME)
    u = draw(SHAPE, complex, 6)
    left, values, right = np.linalg.svd(u.reshape(2, -1), full_matrices=False)
    step = float(values.mean())
    expected = (left * np.maximum(values - step, 0)) @ right
    np.testing.assert_allclose(term.prox(u, step).reshape(2, -1), expected, atol=1e-10)


def explicit_generalised_variation(x, edges, cost):
    """min over w of Σ‖∇x − w‖ + β Σ‖J w‖ by cvxpy, differences written out voxel by voxel."""
    nz, ny, nx = x.shape
    unit = np.sqrt(edges[1] * edges[2])
    scale = [unit / edge for edge in edges]
    w = cvxpy.Variable((3, x.size))
    place = np.arange(x.size).reshape(x.shape)
    total = 0
    for z, j, i in np.ndindex(nz, ny, nx):
        here = place[z, j, i]
        steps = {1: place[z, (j + 1) % ny, i], 2: place[z, j, (i + 1) % nx]}
        if z + 1 < nz:
            steps[0] = place[z + 1, j, i]
        flat = x.ravel()
        parts = [scale[a] * (flat[to] - flat[here]) - w[a, here] for a, to in steps.items()]
        total += cvxpy.norm(cvxpy.hstack(parts))
        slopes = [
            scale[a] * (w[b, to] - w[b, here])
            for b in (0, 1, 2)
            for a, to in steps.items()
            if b or (z + 1 < nz and (a or z + 2 < nz))
        ]
        total += cost * cvxpy.norm(cvxpy.hstack(slopes))
    problem = cvxpy.Problem(cvxpy.Minimize(total))
    problem.solve(solver=cvxpy.CLARABEL)
    return problem.value


def test_generalised_variation_against_cvxpy():
    x = np.zeros((3, 4, 4))
    x[1:, :2] = draw((2, 2, 4), float, 7)
    term = TotalGeneralisedVariation(1.5).on(Frame((1, 3, 4, 4), VOXEL, np.ones(1)))
    expected = explicit_generalised_variation(x, VOXEL, 1.5)
    assert term.value(term.analyse(x[None])) == pytest.approx(expected, rel=2e-3)


def test_ramps_along_z_are_free():
    """Total variation charges a ramp, its second-order generalisation does not."""
    shape = (1, 5, 4, 4)
    x = np.broadcast_to(np.arange(5.0)[:, None, None], shape)
    frame = Frame(shape, VOXEL, np.ones(1))
    plain, general = TotalVariation().on(frame), TotalGeneralisedVariation().on(frame)
    assert plain.value(plain.analyse(x)) > 10
    assert general.value(general.analyse(x)) == pytest.approx(0, abs=1e-6)


def test_generalised_variation_reaches_the_optimum():
    """The whole problem against cvxpy, with w as a variable of its own."""
    quadratic, _, _ = small_quadratic()
    (term,) = bound((TotalGeneralisedVariation(1.5),), quadratic)
    problem = Problem(quadratic, (Weighted(term, 1.0),))
    solution = solve(problem, ADMM(), Stopping(1e-5, limit=3000))
    assert solution.reason is Reason.CONVERGED
    shape, size = quadratic.shape, int(np.prod(quadratic.shape))
    G = matrix_of(lambda e: quadratic.normal(e.astype(np.float32)).astype(float), shape)
    values, vectors = np.linalg.eigh(0.5 * (G + G.T))
    root = np.sqrt(np.maximum(values, 0))[:, None] * vectors.T
    x, w = cvxpy.Variable(size), cvxpy.Variable(3 * size)
    gradient = matrix_of(term._gradient.apply, shape)
    wide = (shape[0], 3, *shape[1:])
    slopes = matrix_of(term._push, wide)
    cost = 0.5 * cvxpy.sum_squares(root @ x) - quadratic.linear.ravel().astype(float) @ x
    for image, count in ((gradient @ x - w, 3), (slopes @ w, 9)):
        for part in range(shape[0]):
            each = image.shape[0] // shape[0]
            one = image[part * each : (part + 1) * each]
            lengths = cvxpy.norm(cvxpy.reshape(one, (count, each // count), order="C"), axis=0)
            cost += cvxpy.sum(lengths)
    idle = np.zeros(wide, bool)
    idle[:, 0, -1] = True
    reference = cvxpy.Problem(cvxpy.Minimize(cost), [w[np.flatnonzero(idle.ravel())] == 0])
    reference.solve(solver=cvxpy.CLARABEL)
    optimum = reference.value + 0.5 * quadratic.energy
    assert abs(problem.objective(solution.x) - optimum) < 1e-4 * 0.5 * quadratic.energy


def test_symbols_fit_blocks_of_coarse_pixels():
    """(G + S)⁻¹ (G + S) x = x with S differing between frequencies, pixels of two voxels."""
    from recon.forward import BlockQuadratic, accumulate
    from tests.cases import BASES, DETECTORS, Case, instrument, protocol

    grid, how = DETECTORS["coarse camera"]
    for basis, real in product(BASES.values(), (False, True)):
        table = protocol(grid, True, False, (1, 2), 9)
        model = Case("", grid, instrument(grid=grid, **how), table, basis).model
        y = draw((9, 4, *model.channels), np.complex64, 1)
        quadratic = BlockQuadratic(accumulate(model, [(slice(0, 9), y)]), real)
        frame = Frame(quadratic.shape, grid.voxel, np.ones(quadratic.shape[0]))
        symbol = TotalGeneralisedVariation().on(frame).symbol + TotalVariation().on(frame).symbol
        symbol = symbol.scaled(float(quadratic.largest)) + Support(np.ones(grid.shape, bool)).on(
            frame
        ).symbol.scaled(float(quadratic.largest))
        x = draw(quadratic.shape, quadratic.dtype, 2)
        right = quadratic.normal(x) + symbol.apply(x)
        np.testing.assert_allclose(quadratic.step(symbol)(right), x, atol=2e-3)


@pytest.mark.parametrize(
    "priors",
    [
        (UndecimatedWaveletSparsity("haar", 2, joint=True), TotalVariation(), NonNegative()),
        (TotalGeneralisedVariation(), LowRank(), Support(np.arange(64).reshape(8, 8) > 20)),
        (LocalLowRank(4), WaveletSparsity("haar", 1)),
    ],
    ids=["wavelet+tv+bound", "tgv+rank+support", "patches+wavelet"],
)
def test_any_combination_is_estimated(priors):
    """Converges, meets the last constraint, and explains the data."""
    quadratic, _, _ = small_quadratic()
    priors = tuple(
        Support(np.broadcast_to(p.inside, quadratic.shape[1:])) if isinstance(p, Support) else p
        for p in priors
    )
    frame = Frame(quadratic.shape, (1e-6,) * 3, np.ones(quadratic.shape[0]))
    found = Penalised(priors, weight=Fixed(0.5), replicas=None).estimate(quadratic, frame)
    assert found.reason is Reason.CONVERGED
    last = priors[-1].on(frame)
    assert not last.constraint or last.value(found.x) == 0
    assert found.misfit < 1.5


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: UndecimatedWaveletSparsity("none").on(FRAME), "no discrete wavelet"),
        (lambda: UndecimatedWaveletSparsity(levels=4).on(FRAME), "4 levels on a plane of 8"),
        (lambda: LocalLowRank(5).on(FRAME), "do not tile"),
        (lambda: LowRank().on(Frame((1, 2, 4, 4), VOXEL, np.ones(1))), "no rank to lower"),
        (lambda: Support(np.zeros(SHAPE[1:], bool)).on(FRAME), "mask is empty"),
        (lambda: Support(np.ones((2, 2, 2), bool)).on(FRAME), "mask of shape"),
        (lambda: TotalGeneralisedVariation(0.0), "must be positive"),
    ],
)
def test_refusals_are_one_line(make, says):
    with pytest.raises(InputError, match=says) as caught:
        make()
    assert "\n" not in str(caught.value)
