"""The general operator against dense direct sums, the dot test, and a non-uniform FFT."""

from __future__ import annotations

import finufft
import numpy as np
import pytest

from recon.forward import ForwardOperator
from recon.forward.channels import Channels, LayerDensity
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.off_lattice import calibrated
from recon.forward.toeplitz import ToeplitzNormal, is_toeplitz
from recon.grid import Grid
from recon.physics.dipole import lateral_footprint
from tests.cases import BASES, NOISE, Case, instrument, protocol, registry
from tests.dense_general import dense_general

CASES = registry()


def draw(rng, shape):
    return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)


def general(case, **realities):
    return GeneralModel.build(
        case.grid, case.instrument, case.protocol, case.basis, NOISE, **realities
    )


def compare(operator, dense, bound=1e-9):
    """A and Aᴴ against a dense matrix."""
    rng = np.random.default_rng(0)
    x, y = draw(rng, operator.object_shape), draw(rng, operator.sample_shape)
    for found, expected in (
        (operator.apply(x), dense @ x.ravel()),
        (operator.adjoint(y), dense.conj().T @ y.ravel()),
    ):
        error = np.linalg.norm(found.ravel() - expected)
        assert error <= bound * np.linalg.norm(expected)


@pytest.mark.parametrize("case", CASES[::3], ids=[case.name for case in CASES[::3]])
def test_ideal_measurement_equals_ideal_operator(case):
    ideal = ForwardOperator(case.model, np.complex128)
    operator = GeneralOperator(general(case), np.complex128)
    rng = np.random.default_rng(0)
    x, y = draw(rng, operator.object_shape), draw(rng, operator.sample_shape)
    for found, expected in (
        (operator.apply(x), ideal.apply(x)),
        (operator.adjoint(y), ideal.adjoint(y)),
    ):
        assert np.linalg.norm(found - expected) <= 1e-11 * np.linalg.norm(expected) + 1e-18


GRID = Grid((2, 6, 8), (1.5e-6, 1e-6, 1e-6), base_height=0.2e-6)
WIDE = Grid((2, 8, 10), (1.5e-6, 1e-6, 1e-6), base_height=0.2e-6)
SHEAR = np.array([[1.03, 0.02, 0], [-0.05, 0.98, 0], [0, 0, 1.1]])


def experiment(grid=GRID, view=GRID, pixel_um=1.0, kind="camera", off=False, sensor=True):
    """A small experiment whose view may be smaller than its grid."""
    table = protocol(view, True, sensor, (2, 4, 1), shots=4)
    if off:
        table = calibrated(table, SHEAR, SHEAR[:2, :2])
    apparatus = instrument(kind, view, pixel_um)
    return Case("", grid, apparatus, table, BASES["decays"])


def maps(case, shape=None, seed=3):
    """A gain map, and a density map on the grid."""
    rng = np.random.default_rng(seed)
    shape = shape or case.instrument.detector.channels()
    gain = rng.uniform(0.6, 1, shape) * np.exp(1j * rng.uniform(-1, 1, shape))
    return gain, rng.uniform(0.7, 1.3, case.grid.shape[1:])


def realities():
    """Every reality alone and all together, as (name, case, arguments, dense arguments)."""
    found = []
    for kind, pixel in (("camera", 1.0), ("camera", 2.0), ("one", None)):
        name = f"{kind} {pixel}"
        case = experiment(kind=kind, pixel_um=pixel)
        gain, density = maps(case)
        channels = Channels.ideal(gain.shape).with_gain(gain)
        layer = LayerDensity(density)
        found += [
            (f"{name}: gain", case, {"channels": channels}, {"gain": gain}),
            (f"{name}: patchy layer", case, {"layer": layer}, {"density": density}),
            (f"{name}: off lattice", experiment(kind=kind, pixel_um=pixel, off=True), {}, {}),
        ]
        margin = (2, 2) if pixel == 2.0 else (1, 1)
        wide_grid = Grid((2, 10, 12), GRID.voxel, GRID.base_height) if pixel == 2.0 else WIDE
        wide = experiment(grid=wide_grid, kind=kind, pixel_um=pixel)
        found.append((f"{name}: wide", wide, {"margin": margin}, {"margin": margin}))
        both = experiment(grid=wide_grid, kind=kind, pixel_um=pixel, off=True)
        gain, density = maps(both)
        channels = Channels.ideal(gain.shape).with_gain(gain)
        courses = np.random.default_rng(1).standard_normal((4, 4, 2)) * (1 + 0.5j)
        arguments = {"margin": margin, "courses": courses}
        found.append(
            (
                f"{name}: all",
                both,
                arguments | {"channels": channels, "layer": LayerDensity(density)},
                arguments | {"gain": gain, "density": density},
            )
        )
    return found


REALITIES = realities()
NAMES = [entry[0] for entry in REALITIES]


@pytest.mark.parametrize("name, case, arguments, dense", REALITIES, ids=NAMES)
def test_equals_direct_sums(name, case, arguments, dense):
    compare(
        GeneralOperator(general(case, **arguments), np.complex128), dense_general(case, **dense)
    )


@pytest.mark.parametrize("dtype, bound", [(np.complex64, 1e-6), (np.complex128, 1e-12)])
@pytest.mark.parametrize("name, case, arguments, dense", REALITIES, ids=NAMES)
def test_adjoint_identity(name, case, arguments, dense, dtype, bound):
    operator = GeneralOperator(general(case, **arguments), dtype)
    rng = np.random.default_rng(1)
    x = draw(rng, operator.object_shape).astype(dtype)
    y = draw(rng, operator.sample_shape).astype(dtype)
    forward, back = operator.apply(x), operator.adjoint(y)
    assert forward.dtype == back.dtype == dtype
    left, right = np.vdot(forward.astype(complex), y), np.vdot(x, back.astype(complex))
    assert abs(left - right) <= bound * np.linalg.norm(forward) * np.linalg.norm(y)


@pytest.mark.parametrize("name, case, arguments, dense", REALITIES, ids=NAMES)
def test_normal_is_adjoint_times_weight_times_operator(name, case, arguments, dense):
    rng = np.random.default_rng(2)
    model = general(case, **arguments)
    weight = rng.integers(0, 2, model.channels.shape) * rng.uniform(0.5, 1, model.channels.shape)
    weight[0, 0] = 1.0
    model = model.with_channels(model.channels.reweighted(weight))
    operator = GeneralOperator(model, np.complex128)
    x = draw(rng, operator.object_shape)
    weights = model.weight[:, None, None, None] * weight
    expected = operator.adjoint(weights * operator.apply(x))
    error = np.linalg.norm(operator.normal(x) - expected)
    assert error <= 1e-10 * np.linalg.norm(expected)


def test_missing_shots_are_rows_left_out():
    case = experiment(off=True)
    kept = np.array([3, 0])
    model = general(case)
    few = GeneralOperator(model.subset(kept), np.complex128)
    x = draw(np.random.default_rng(0), few.object_shape)
    all_shots = GeneralOperator(model, np.complex128).apply(x)
    np.testing.assert_allclose(few.apply(x), all_shots[kept], rtol=1e-9)


def test_noise_has_the_normal_operator_as_covariance():
    """E|⟨p, Aᴴ W n⟩|² = ⟨p, AᴴWA p⟩ within five standard errors of 600 draws."""
    case = experiment(off=True)
    gain, density = maps(case)
    channels = Channels.ideal(gain.shape).with_gain(gain).with_noise(1 + density)
    operator = GeneralOperator(general(case, channels=channels), np.complex128)
    rng = np.random.default_rng(4)
    probe = draw(rng, operator.object_shape)
    expected = np.vdot(probe, operator.normal(probe)).real
    power = [abs(np.vdot(probe, operator.noise(rng))) ** 2 for _ in range(600)]
    assert np.mean(power) == pytest.approx(expected, rel=5 / np.sqrt(600))


def test_off_lattice_shot_equals_non_uniform_transform():
    """The object's spectrum at κ − k and the channels' sum by finufft, on a larger grid."""
    grid = Grid((2, 24, 30), (1.5e-6, 1e-6, 1e-6), base_height=0.2e-6)
    case = experiment(grid=grid, view=grid, off=True)
    model = general(case)
    operator = GeneralOperator(model, np.complex128)
    x = draw(np.random.default_rng(0), operator.object_shape)
    x[1] = 0
    found = operator.apply(x)
    for shot in range(len(model)):
        band_y, band_x = (
            np.arange(-n // 2, n // 2) * s
            for n, s in zip(grid.shape[1:], grid.lattice_step, strict=True)
        )
        k_y, k_x = model.nuclear[shot]
        at_y, at_x = np.meshgrid(band_y - k_y, band_x - k_x, indexing="ij")
        points = (at_y.ravel() * grid.voxel[1], at_x.ravel() * grid.voxel[2])
        spectrum = finufft.nufft2d2(*points, x[0], isign=-1, eps=1e-12, modeord=0)
        middle = [n // 2 for n in grid.shape[1:]]
        spectrum *= np.exp(-1j * (points[0] * middle[0] + points[1] * middle[1]))
        axis = int(model.ideal.encoding.sensing_axis[shot])
        kernel = model.ideal.kernel(axis, float(model.ideal.encoding.axial[shot]))
        field = (kernel * spectrum.reshape(-1, 24, 30)).sum(axis=0)
        field *= lateral_footprint(at_y, grid.voxel[1]) * lateral_footprint(at_x, grid.voxel[2])
        field = (field * model.transfer(shot)).ravel() * model.amplitude[shot] / (24 * 30)
        q_y, q_x = model.sensor[shot]
        at_y, at_x = np.meshgrid(band_y + q_y, band_x + q_x, indexing="ij")
        points = (at_y.ravel() * grid.voxel[1], at_x.ravel() * grid.voxel[2])
        shift = np.exp(1j * (points[0] * middle[0] + points[1] * middle[1]))
        plane = finufft.nufft2d1(*points, field * shift, (24, 30), isign=1, eps=1e-12)
        expected = case.basis[:, 0, None, None] * plane
        assert np.linalg.norm(found[shot] - expected) <= 1e-9 * np.linalg.norm(expected)


def test_toeplitz_blocks_equal_a_pass_over_the_shots():
    """Off-lattice k and q, several axes, an even gain of 0.8: by padded blocks and shot by shot."""
    grid = Grid((2, 9, 14), (1.5e-6, 1e-6, 1e-6), base_height=0.2e-6)
    case = experiment(grid=grid, view=grid, off=True)
    even = Channels.ideal((9, 14)).with_gain(np.full((9, 14), 0.8))
    model = general(case, channels=even)
    assert is_toeplitz(model)
    operator = GeneralOperator(model)
    x = draw(np.random.default_rng(0), operator.object_shape).astype(np.complex64)
    expected = GeneralOperator(model, np.complex128).normal(x)
    error = np.linalg.norm(ToeplitzNormal(operator)(x) - expected)
    assert error <= 1e-5 * np.linalg.norm(expected)
    gain, density = maps(case)
    assert not is_toeplitz(general(case, layer=LayerDensity(density)))
    assert not is_toeplitz(general(case, channels=even.with_gain(gain)))
