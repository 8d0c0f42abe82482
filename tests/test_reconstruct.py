"""Reconstruction of simulated records, with structure from a real micrograph too."""

from __future__ import annotations

from importlib.resources import files

import numpy as np
import pytest

from recon.basis import species_basis
from recon.demo import instrument
from recon.errors import InputError
from recon.forward import BlockQuadratic
from recon.grid import Grid
from recon.planning.tables import VariableDensity, lateral_factor
from recon.priors import Frame, NonNegative, TotalVariation
from recon.reconstruct import estimate_memory, read_statistics, reconstruct
from recon.result import Cube, SpeciesMaps
from recon.simulate import simulate
from recon.solvers.penalised import Penalised
from recon.solvers.replicas import Replicas
from recon.solvers.ridge import Ridge, chosen_weight
from recon.solvers.weight import Fixed
from recon.specimen import Species
from recon.specimens.from_image import specimen_from_image
from recon.specimens.level_table import GreyLevels, LevelTable
from recon.unknown import ComplexCube, SpeciesAmounts
from tests.problems import small_quadratic

MICRON = 1e-6
SPECIES = tuple(
    Species(
        name=name,
        shift_ppm=shift,
        equivalent_nuclei=3,
        t2_star_ms=120.0,
        t1_s=1.0,
        diffusion_um2_per_ms=0.2,
        polarisation=0.01,
    )
    for name, shift in (("lactate", 1.33), ("creatine", 3.03))
)


@pytest.fixture(scope="module")
def micrograph():
    """A cell's phase image that scikit-image ships in its wheel, as concentrations; 64 × 64 × 3.

    The mapping from grey level to amount is an assumption; the structure is not ours.
    """
    image = files("skimage.data") / "cell.png"
    grid = Grid((3, 64, 64), (4 * MICRON,) * 3)
    levels = GreyLevels(np.array([60.0, 180.0]), np.array([[0.0, 30.0], [40.0, 0.0]]))
    table = LevelTable(SPECIES, levels)
    return specimen_from_image(str(image), table, grid, pixel_um=0.42, refinement=(1, 3, 3))


@pytest.fixture(scope="module")
def record(micrograph):
    """80 of 4096 shots of full phase encoding, with photon noise."""
    protocol = VariableDensity(shots=80).protocol(micrograph.grid, np.arange(12) * 8e-3)
    assert lateral_factor(protocol, micrograph.grid) >= 50
    return simulate(micrograph, instrument(), protocol, seed=4)


@pytest.fixture(scope="module")
def scaled(record):
    statistics = read_statistics(record, SpeciesAmounts())
    unit = 1 / statistics.sensitivity()
    return BlockQuadratic(statistics.scaled(unit), real=True), unit


def error(values, truth):
    return np.linalg.norm(values - truth) / np.linalg.norm(truth)


def test_sparse_halves_the_error_of_the_best_ridge(micrograph, record, scaled):
    """Real structure, ≤ 1/50 of the shots, photon noise; ridge gets the truth to set its weight."""
    quadratic, unit = scaled
    truth = micrograph.concentrations
    maps = reconstruct(record, None, Penalised((TotalVariation(), NonNegative()), replicas=None))
    assert isinstance(maps, SpeciesMaps)
    frame = Frame(quadratic.shape, micrograph.grid.voxel, unit)
    candidates = [
        Ridge(weight).estimate(quadratic, frame).in_units(unit).x
        for weight in np.geomspace(1e-3, 10, 25)
    ]
    best = min(error(x, truth) for x in candidates)
    assert error(maps.values, truth) <= 0.5 * best
    assert maps.account.misfit == pytest.approx(1, abs=0.02)


def test_complex_cube_explains_the_record_and_shows_the_lines(micrograph, record):
    cube = reconstruct(record, ComplexCube(), Penalised((TotalVariation(True),), replicas=None))
    assert isinstance(cube, Cube)
    assert cube.values.dtype == np.complex64
    assert cube.account.misfit == pytest.approx(1, abs=0.02)
    courses = species_basis(SPECIES, record.instrument, record.protocol)
    true = np.tensordot(courses, micrograph.concentrations, 1)
    assert error(cube.values, true) < 0.4
    ppm, spectrum = cube.spectrum()
    step = ppm[1] - ppm[0]
    amounts = micrograph.concentrations[:, 0]
    for place, one in enumerate(SPECIES):
        alone = amounts[place] > 0.8 * amounts[place].max()
        peak = ppm[np.abs(spectrum[:, 0, alone]).mean(axis=1).argmax()]
        assert abs(peak - one.shift_ppm) <= step


def test_replicas_cover_the_truth_near_the_sensor(micrograph, record):
    """Two thirds of the lowest plane lie within one standard error (68 % nominal)."""
    priors = (TotalVariation(), NonNegative())
    maps = reconstruct(record, None, Penalised(priors, replicas=Replicas(20)))
    assert maps.standard_error is not None
    inside = np.abs(maps.values - micrograph.concentrations)[:, 0] < maps.standard_error[:, 0]
    assert 0.5 < inside.mean() < 0.9
    assert "bias" in maps.account.remarks[0]


def test_results_survive_their_files(record, tmp_path):
    maps = reconstruct(record, None, Ridge())
    maps.save(tmp_path / "maps.h5")
    again = SpeciesMaps.load(tmp_path / "maps.h5")
    np.testing.assert_array_equal(again.values, maps.values)
    np.testing.assert_array_equal(again.standard_error, maps.standard_error)
    assert again.account == maps.account
    assert again.grid == maps.grid
    assert again.names == maps.names


def test_memory_is_refused_before_it_is_taken(record):
    assert estimate_memory(record, SpeciesAmounts()) > 1e6
    with pytest.raises(InputError, match=r"needs about .* GiB, the limit is 0\.001 GiB"):
        reconstruct(record, memory_limit_gib=0.001)


@pytest.mark.parametrize("real", [True, False])
def test_ridge_error_is_the_scatter_of_noise(real):
    """Monte-Carlo with direct-sum data: 200 records, each plane within 10 %."""
    quadratic, _, _ = small_quadratic(real)
    weight = 0.05
    frame = Frame(quadratic.shape, (1e-6,) * 3, np.ones(quadratic.shape[0]))
    stated = Ridge(weight).estimate(quadratic, frame).standard_error
    draws = []
    for seed in range(200):
        other, _, _ = small_quadratic(real, seed=seed)
        draws.append(Ridge(weight).estimate(other, frame).x)
    spread = np.std(draws, axis=0, ddof=1)
    rms = np.sqrt((spread**2).mean(axis=(2, 3)))
    np.testing.assert_allclose(rms, stated.mean(axis=(2, 3)), rtol=0.1)


def test_noise_draws_have_the_covariance_of_b():
    """Scatter of b over direct-sum records against draws in the reduced space."""
    quadratic, _, _ = small_quadratic(True)
    rng = np.random.default_rng(0)
    drawn = np.std([quadratic.noise(rng) for _ in range(300)], axis=0)
    seen = np.std([small_quadratic(True, seed=s)[0].linear for s in range(100)], axis=0)
    np.testing.assert_allclose(drawn.mean(axis=(2, 3)), seen.mean(axis=(2, 3)), rtol=0.05)


def test_ridge_weight_is_near_the_best():
    """Stein's estimate against the true error of prediction, over eight records."""
    for seed in range(8):
        quadratic, x, _ = small_quadratic(True, seed=seed)
        frame = Frame(quadratic.shape, (1e-6,) * 3, np.ones(quadratic.shape[0]))

        def risk(weight, quadratic=quadratic, frame=frame, x=x):
            off = (Ridge(weight).estimate(quadratic, frame).x - x).astype(np.float32)
            return float(np.vdot(off, quadratic.normal(off)))

        best = min(risk(w) for w in np.geomspace(1e-4, 10, 40))
        assert risk(chosen_weight(quadratic)) < 1.25 * best


def test_fixed_weights_must_be_positive():
    with pytest.raises(InputError, match="positive"):
        Fixed(0.0)
