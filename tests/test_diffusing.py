"""Diffusing species: operator against direct sums, adjoint, exact blocks."""

from __future__ import annotations

import tracemalloc
from dataclasses import replace

import numpy as np
import pytest

from recon.errors import InputError
from recon.forward import BlockQuadratic, ForwardModel, ForwardOperator, accumulate
from recon.forward.diffusing import DiffusingOperator, JointBlocks, accumulate_joint, joint_memory
from recon.forward.diffusing_model import DiffusingModel
from recon.grid import Grid
from recon.physics.diffusion import wound_layers
from recon.protocol import SpectralAxis
from recon.specimen import Species
from recon.spreading import FreeDiffusion, StandingMap
from recon.symbol import Symbol
from tests.cases import NOISE, instrument, protocol
from tests.dense_diffusing import dense_matrix

FINE = Grid((3, 4, 3), (1.5e-6, 1e-6, 1e-6), base_height=0.3e-6)
COARSE = Grid((2, 4, 4), (1.5e-6, 1e-6, 1e-6))
SHOTS = 5


def species(name: str, shift: float, diffusion: float) -> Species:
    return Species(
        name=name,
        shift_ppm=shift,
        equivalent_nuclei=2,
        t2_star_ms=30.0,
        t1_s=1.0,
        diffusion_um2_per_ms=diffusion,
        polarisation=0.05,
    )


PAIR = (species("slow", 1.3, 0.02), species("fast", 3.2, 1.1))


def table(grid, pulse: float, listens: bool):
    made = protocol(grid, True, True, (1, 3), SHOTS)
    return replace(
        made,
        sample_times=np.array([0.1e-3, 0.4e-3, 2e-3]),
        evolution_time=np.resize([0.0, 0.3e-3], SHOTS),
        encoding_duration=pulse,
        spectral_axis=SpectralAxis.LISTEN_AFTER_ENCODING
        if listens
        else SpectralAxis.EVOLVE_THEN_ENCODE,
    )


DETECTORS = {
    "camera": (FINE, {}),
    "coarse": (COARSE, {"pixel_um": 2.0}),
    "one": (FINE, {"kind": "one"}),
}
CASES = [
    (detector, spreading, pulse, listens)
    for detector in DETECTORS
    for spreading in (FreeDiffusion(), StandingMap())
    for pulse, listens in ((0.0, True), (0.05e-3, True), (0.05e-3, False))
]
IDS = [
    f"{d}-{type(s).__name__}-{p * 1e6:g}us-{'direct' if x else 'indirect'}" for d, s, p, x in CASES
]


def model_of(case):
    detector, spreading, pulse, listens = case
    grid, how = DETECTORS[detector]
    made = table(grid, pulse, listens)
    apparatus = instrument(grid=grid, **how)
    return DiffusingModel.build(grid, apparatus, made, PAIR, NOISE, spreading), made


def random_pair(operator, seed=0):
    rng = np.random.default_rng(seed)

    def draw(shape):
        return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)

    return draw(operator.object_shape), draw(operator.sample_shape)


@pytest.mark.parametrize("case", CASES, ids=IDS)
def test_equals_dense_matrix(case):
    model, made = model_of(case)
    operator = DiffusingOperator(model, np.complex128)
    dense = dense_matrix(
        model.base.grid,
        model.base.instrument,
        made,
        model.bases,
        model.group,
        model.wound_times,
        model.diffusion,
        model.spreading.standing,
    )
    x, y = random_pair(operator)
    expected = dense @ x.ravel()
    error = np.linalg.norm(operator.apply(x).ravel() - expected) / np.linalg.norm(expected)
    bound = 2e-5 if model.pulse else 1e-6  # the pulse is 400 steps in the direct sums
    assert error < bound
    back = dense.conj().T @ y.ravel()
    assert np.linalg.norm(operator.adjoint(y).ravel() - back) < bound * np.linalg.norm(back)


@pytest.mark.parametrize("dtype, bound", [(np.complex64, 1e-6), (np.complex128, 1e-12)])
@pytest.mark.parametrize("case", CASES, ids=IDS)
def test_adjoint_identity(case, dtype, bound):
    operator = DiffusingOperator(model_of(case)[0], dtype)
    x, y = (part.astype(dtype) for part in random_pair(operator))
    forward, back = operator.apply(x), operator.adjoint(y)
    assert forward.dtype == back.dtype == dtype
    left, right = np.vdot(forward.astype(complex), y), np.vdot(x, back.astype(complex))
    assert abs(left - right) <= bound * np.linalg.norm(forward) * np.linalg.norm(y)


@pytest.mark.parametrize("real", [False, True], ids=["complex", "real"])
@pytest.mark.parametrize("case", CASES, ids=IDS)
def test_blocks_are_exact(case, real):
    """G x, b, the value and the shifted inverse equal what the operator itself gives."""
    model, _ = model_of(case)
    operator = DiffusingOperator(model, np.complex128)
    x, y = random_pair(operator)
    x = (x.real if real else x) * 1e-3
    y = y * NOISE
    quadratic = JointBlocks(
        accumulate_joint(model, [(slice(0, 2), y[:2]), (slice(2, 5), y[2:])]), real
    )
    kind = quadratic.dtype
    weight = model.base.encoding.weight[:, None, None, None]
    seen = operator.apply(x.astype(complex))
    value = 0.5 * np.sum(weight * np.abs(y - seen) ** 2)
    assert quadratic.value(x.astype(kind)) == pytest.approx(value, rel=1e-5)
    normal, linear = operator.adjoint(weight * seen), operator.adjoint(weight * y)
    if real:
        normal, linear = normal.real, linear.real
    assert np.linalg.norm(quadratic.normal(x.astype(kind)) - normal) <= 1e-5 * np.linalg.norm(
        normal
    )
    assert np.linalg.norm(quadratic.linear - linear) <= 1e-5 * np.linalg.norm(linear)
    damping = quadratic.largest
    solved = quadratic.step(Symbol(damping))(x.astype(kind))
    again = quadratic.normal(solved) + damping * solved
    assert np.linalg.norm(again - x) < 1e-4 * np.linalg.norm(x)
    unit = np.array([2.0, 0.5])
    scaled = quadratic.scaled(unit).normal((x / unit[:, None, None, None]).astype(kind))
    expected = normal * unit[:, None, None, None]
    assert np.linalg.norm(scaled - expected) <= 1e-5 * np.linalg.norm(expected)


def test_without_diffusion_it_is_the_plain_operator():
    still = tuple(one.model_copy(update={"diffusion_um2_per_ms": 0.0}) for one in PAIR)
    made = replace(table(FINE, 0.0, True), evolution_time=np.zeros(SHOTS))
    apparatus = instrument(grid=FINE)
    model = DiffusingModel.build(FINE, apparatus, made, still, NOISE)
    plain_model = ForwardModel.build(FINE, apparatus, made, model.bases[0], NOISE)
    diffusing = DiffusingOperator(model, np.complex128)
    plain = ForwardOperator(plain_model, np.complex128)
    x, y = random_pair(plain)
    np.testing.assert_allclose(diffusing.apply(x), plain.apply(x), rtol=1e-9, atol=1e-25)
    batches = [(slice(0, SHOTS), y * NOISE)]
    joint = JointBlocks(accumulate_joint(model, batches), True)
    apart = BlockQuadratic(accumulate(plain_model, batches), True)
    x = x.real.astype(np.float32)
    assert joint.value(x) == pytest.approx(apart.value(x), rel=1e-5)
    np.testing.assert_allclose(joint.diagonal(), apart.diagonal(), rtol=1e-4)


def test_statistics_add():
    model, _ = model_of(CASES[0])
    _, y = random_pair(DiffusingOperator(model))
    whole = accumulate_joint(model, [(slice(0, 5), y)])
    parts = [
        accumulate_joint(model.subset(np.array(rows)), [(slice(0, len(rows)), y[rows])])
        for rows in ([0, 1], [2, 3, 4])
    ]
    together = parts[0] + parts[1]
    np.testing.assert_allclose(
        together.normal, whole.normal, rtol=1e-3, atol=1e-6 * np.abs(whole.normal).max()
    )
    np.testing.assert_allclose(
        together.linear, whole.linear, rtol=1e-3, atol=1e-6 * np.abs(whole.linear).max()
    )
    assert together.energy == pytest.approx(whole.energy)


def test_unwound_standing_map_loses_nothing():
    """Without nuclear gradient a map that stays is seen as if nothing diffused."""
    made = replace(
        protocol(FINE, False, True, (1,), SHOTS),
        sample_times=np.array([0.0, 50e-3]),
    )
    moving = DiffusingModel.build(FINE, instrument(grid=FINE), made, PAIR, NOISE, StandingMap())
    still = replace(moving, diffusion=np.zeros(2))
    x, _ = random_pair(DiffusingOperator(moving))
    with_it = DiffusingOperator(moving, np.complex128).apply(x)
    without = DiffusingOperator(still, np.complex128).apply(x)
    assert np.linalg.norm(with_it - without) < 1e-5 * np.linalg.norm(without)


def test_sampling_within_the_pulse_is_refused():
    with pytest.raises(InputError, match="within the encoding pulse"):
        table(FINE, 1e-3, True)


@pytest.mark.parametrize("spreading", [FreeDiffusion(), StandingMap()], ids=["free", "standing"])
def test_memory_is_foreseen(spreading):
    """What reading a record takes, by the interpreter's own count."""
    grid = Grid((3, 24, 24), (1e-6, 1e-6, 1e-6))
    made = protocol(grid, True, False, (1,), 6)
    made = replace(made, nuclear_wavevector=made.nuclear_wavevector * [1, 1, 0])
    model = DiffusingModel.build(grid, instrument(grid=grid), made, PAIR, NOISE, spreading)
    samples = np.ones((6, model.times, 24, 24), np.complex64)
    tracemalloc.start()
    accumulate_joint(model, [(slice(0, 6), samples)])
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert 0.6 * peak < joint_memory(model) < 2.5 * peak


def test_closed_slab_seen_from_afar_keeps_four_over_pi_squared():
    """Wound to π/a, spread for long, rewound: Tanner & Stejskal's plateau, from the layers seen."""
    count, thickness = 5, 10e-6
    k = np.pi / thickness
    late = wound_layers(np.zeros(1), count, thickness, k, np.array([1e-6]), standing=True)[0, :, 0]
    edges = np.arange(count + 1) * thickness / count
    rewind = np.diff(np.exp(-1j * k * edges) / (-1j * k)) / (thickness / count)
    assert (late * rewind).sum() / thickness == pytest.approx(4 / np.pi**2, rel=1e-9)
