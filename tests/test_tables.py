import numpy as np
import pytest

from recon.grid import Grid
from recon.planning.tables import (
    FullRaster,
    NoSensorGradient,
    SensorGradientOnly,
    SensorRing,
    UniformRandom,
    VariableDensity,
    lateral_factor,
    lattice_points,
)
from tests.descriptions import line

GRID = Grid((3, 16, 25), (2e-6, 3e-6, 2e-6))
TIMES = np.arange(3) * 1e-3


def steps(wavevector, grid=GRID):
    """Lattice steps along (x, y), after a check that they are whole."""
    found = wavevector[:, :2] / np.array(grid.lattice_step[::-1])
    np.testing.assert_allclose(found, np.rint(found), atol=1e-9)
    return np.rint(found).astype(int)


@pytest.mark.parametrize(
    "table",
    [
        FullRaster(),
        UniformRandom(shots=40),
        VariableDensity(shots=40, width=0.5, axes=(1, 3)),
        VariableDensity(shots=200, sensor=SensorRing((0.3, 0.6))),
        UniformRandom(shots=40, sensor=SensorGradientOnly()),
    ],
)
def test_wavevectors_lie_on_the_lattice_within_nyquist(table):
    one = table.protocol(GRID, TIMES)
    nyquist = np.pi / np.array([2e-6, 3e-6])
    for wavevector in (one.nuclear_wavevector, one.sensor_wavevector):
        steps(wavevector)
        assert (np.abs(wavevector[:, :2]) <= nyquist * (1 + 1e-9)).all()


def test_full_raster_takes_every_point_once():
    one = FullRaster(axes=(2, 4)).protocol(GRID, TIMES)
    assert len(one) == 2 * 16 * 25
    for axis in (2, 4):
        points = steps(one.nuclear_wavevector)[one.sensing_axis == axis]
        assert {tuple(p) for p in points} == {tuple(p) for p in lattice_points(GRID)}
    spectrum = np.fft.fftfreq(25) * 25
    assert set(points[:, 0]) == set(spectrum.astype(int))


def test_seed_decides():
    first, again, other = (
        VariableDensity(shots=30, axial_bound_rad_per_um=0.2, seed=s).protocol(GRID, TIMES).digest()
        for s in (1, 1, 2)
    )
    assert first == again != other


def test_points_are_not_repeated_for_an_axis():
    one = UniformRandom(shots=800, axes=(1, 2)).protocol(GRID, TIMES)
    for axis in (1, 2):
        points = steps(one.nuclear_wavevector)[one.sensing_axis == axis]
        assert len({tuple(p) for p in points}) == 400
    np.testing.assert_array_equal(one.sensing_axis[:4], [1, 2, 1, 2])


def test_gaussian_density_has_the_stated_width():
    grid = Grid((1, 256, 256), (1e-6, 1e-6, 1e-6))
    one = VariableDensity(shots=3000, width=0.2).protocol(grid, TIMES)
    spread = steps(one.nuclear_wavevector, grid).std(axis=0) / 128
    # Drawing without replacement flattens the middle a little; tolerance from the shot number.
    np.testing.assert_allclose(spread, 0.2, rtol=0.15)


def test_axial_wavevector_stays_in_its_bound():
    one = UniformRandom(shots=100, axial_bound_rad_per_um=0.3).protocol(GRID, TIMES)
    axial = one.nuclear_wavevector[:, 2]
    assert 0.25e6 < np.abs(axial).max() <= 0.3e6
    assert not UniformRandom(shots=9).protocol(GRID, TIMES).nuclear_wavevector[:, 2].any()


def test_sensor_ring_keeps_the_object_frequency():
    plain = VariableDensity(shots=60, seed=4, sensor=NoSensorGradient()).protocol(GRID, TIMES)
    ring = VariableDensity(shots=60, seed=4, sensor=SensorRing((0.3, 0.6))).protocol(GRID, TIMES)
    total = ring.nuclear_wavevector[:, :2] + ring.sensor_wavevector
    np.testing.assert_allclose(total, plain.nuclear_wavevector[:, :2], atol=1e-3)
    radius = np.linalg.norm(ring.sensor_wavevector, axis=1)
    half_step = np.hypot(*GRID.lattice_step) / 2
    np.testing.assert_allclose(radius, np.resize([0.3e6, 0.6e6], 60), atol=half_step)


def test_sensor_gradient_alone_leaves_the_nuclei():
    one = UniformRandom(shots=50, sensor=SensorGradientOnly()).protocol(GRID, TIMES)
    assert not one.nuclear_wavevector.any()
    assert one.sensor_wavevector.any()


def test_lateral_factor():
    assert lateral_factor(UniformRandom(shots=8).protocol(GRID, TIMES), GRID) == 50


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: UniformRandom(shots=0), "0 shots"),
        (lambda: UniformRandom(shots=401).protocol(GRID, TIMES), "lattice of 400 points"),
        (lambda: UniformRandom(shots=4, axes=(1, 5)), "sensing axes (1, 5)"),
        (lambda: VariableDensity(shots=4, width=0), "width 0 must be positive"),
        (lambda: FullRaster(axial_bound_rad_per_um=-1), "axial_bound_rad_per_um"),
        (lambda: SensorRing(()), "wavenumber_rad_per_um"),
        (
            lambda: UniformRandom(shots=4, sensor=SensorRing((50.0,))).protocol(GRID, TIMES),
            "a ring of 50 rad/um has no place",
        ),
    ],
)
def test_bad_rules(make, words):
    assert words in line(of=make)
