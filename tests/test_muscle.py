"""The invented muscle section: seeded, analytic, plausible."""

from __future__ import annotations

import time

import numpy as np
import pytest

from recon.errors import InputError
from recon.grid import Grid
from recon.specimens.droplets import Droplets, ball_points
from recon.specimens.fibres import Outline, power_centres, smooth_minimum
from recon.specimens.muscle import FIBRE_KINDS, Muscle, MuscleSize

MICRON = 1e-6
REFINEMENT = (2, 2, 2)


@pytest.fixture(scope="module")
def muscle() -> Muscle:
    return Muscle.small(seed=3)


@pytest.fixture(scope="module")
def specimen(muscle):
    return muscle.specimen(REFINEMENT)


@pytest.fixture(scope="module")
def places(muscle):
    """Where the sub-voxels of the specimen lie in the mosaic."""
    axes = muscle.grid.sub_positions(REFINEMENT)
    z, y, x = (axis.ravel() for axis in np.meshgrid(*axes, indexing="ij"))
    return muscle.mosaic.locate(x, y, z)


def test_same_seed_same_section_other_seed_other_section(muscle, specimen):
    again = Muscle.small(seed=3).specimen(REFINEMENT)
    np.testing.assert_array_equal(again.maps, specimen.maps)
    other = Muscle.small(seed=4).specimen((1, 1, 1))
    assert np.abs(other.concentrations - specimen.concentrations).max() > 1000


def test_small_is_drawn_quickly():
    begin = time.process_time()
    Muscle.small(seed=9).specimen((2, 3, 3))
    assert time.process_time() - begin < 6  # twice the aim of 3 s: the machine may be busy


def test_maps_fit_the_grid_and_say_that_they_are_invented(muscle, specimen):
    assert specimen.grid.shape == (6, 64, 64)
    assert specimen.maps.shape == (4, 12, 128, 128) and specimen.maps.dtype == np.float32
    assert specimen.names == ("water", "creatine", "lactate", "lipid")
    assert "invented" in specimen.notes.lower()
    assert Muscle.medium().grid.shape == (6, 96, 96)
    assert Muscle.large().grid.shape == (8, 128, 128)


@pytest.mark.parametrize("seed", range(4))
def test_an_empty_margin_surrounds_the_section(seed):
    section = Muscle.small(seed).specimen((1, 1, 1)).concentrations.sum(axis=(0, 1)) > 0
    for axis in (0, 1):
        filled = np.flatnonzero(section.any(axis=axis))
        assert 5 <= filled[0] <= 9 and 54 <= filled[-1] <= 58


def test_contents_stay_within_what_tissue_can_hold(specimen):
    water, creatine, lactate, lipid = specimen.maps
    assert water.max() < 55.5e3 and water.min() == 0
    assert 40 < creatine.max() < 60 and 35 < lactate.max() < 60
    assert 0 < lipid.max() <= 1040.001


def test_lactate_marks_fast_fibres_and_lipid_slow_ones(muscle, specimen, places):
    deep = places.depth > 4 * MICRON
    kinds = muscle.kinds[places.fibre]
    lactate, lipid = (specimen.maps[i].ravel() for i in (2, 3))
    mean = [[line[deep & (kinds == kind)].mean() for kind in range(3)] for line in (lactate, lipid)]
    assert mean[0][2] > 1.5 * mean[0][1] > 3 * mean[0][0]
    assert mean[1][0] > 2 * mean[1][1] > 4 * mean[1][2]


def test_lipid_crowds_beneath_the_membranes_of_slow_fibres(muscle, specimen, places):
    slow = muscle.kinds[places.fibre] == 0
    lipid = specimen.maps[3].ravel()
    rim = lipid[slow & (places.depth > 1 * MICRON) & (places.depth < 5 * MICRON)].mean()
    core = lipid[slow & (places.depth > 9 * MICRON)].mean()
    assert rim > 3 * core > 0


def test_fibres_are_as_wide_as_fibres(muscle, places):
    inside = places.depth > 0
    sub_voxel_area = 16 / 4 / 12  # µm² per sample, averaged over 12 heights
    area = np.bincount(places.fibre[inside]) * sub_voxel_area
    diameter = np.sqrt(4 * area / np.pi)
    assert diameter.min() > 25 and diameter.max() < 75
    assert 40 < diameter.mean() < 52
    shares = np.bincount(muscle.kinds) / len(muscle.kinds)
    np.testing.assert_allclose(shares, [kind.share for kind in FIBRE_KINDS], atol=0.06)


def test_water_seams_part_the_fibres_and_hold_a_tenth_of_the_section(places):
    section = places.inside > 0
    share = (section & (places.depth < 0)).sum() / section.sum()
    assert 0.07 < share < 0.18


def test_fibres_lean_and_change_with_height(muscle, places):
    owner = places.fibre.reshape(12, 128, 128)
    inside = (places.depth > 0).reshape(owner.shape)
    x = muscle.grid.sub_positions(REFINEMENT)[2]
    y = muscle.grid.sub_positions(REFINEMENT)[1]
    drift = []
    for fibre in range(len(muscle.kinds)):
        ends = []
        for level in (0, 11):
            rows, columns = np.nonzero((owner[level] == fibre) & inside[level])
            ends.append((x[columns].mean(), y[rows].mean()))
        drift.append(np.subtract(*ends))
    lengths = np.hypot(*np.array(drift).T) / MICRON
    assert 1 < lengths.mean() < 5  # 22 µm high at about 5° is 1.9 µm


def test_structure_is_the_same_whatever_grid_looks_at_it(muscle):
    shares = {}
    for factor in (1, 2, 3):
        maps = muscle.specimen((1, factor, factor)).concentrations
        shares[factor] = maps[:3].sum(axis=0)
    coarse = np.abs(shares[1] - shares[3]).mean()
    fine = np.abs(shares[2] - shares[3]).mean()
    assert fine < 0.5 * coarse
    assert coarse < 0.03 * shares[3].max()


def test_corners_of_the_mosaic_have_equal_power():
    random = np.random.default_rng(1)
    centres, weights = random.normal(size=(6, 2)), random.uniform(0, 0.1, 6)
    triples = np.array([[0, 1, 2], [3, 5, 4]])
    for corner, triple in zip(power_centres(centres, weights, triples), triples, strict=True):
        power = ((corner - centres[triple]) ** 2).sum(axis=1) - weights[triple]
        np.testing.assert_allclose(power, power[0], atol=1e-10)


def test_outline_depth_is_a_distance():
    outline = Outline((10.0, 20.0), (8.0, 5.0), 2.0)
    assert outline.depth(np.array(10.0), np.array(20.0)) == pytest.approx(5.0)
    assert outline.depth(np.array(18.0), np.array(20.0)) == pytest.approx(0.0)
    corner = outline.depth(np.array(18.0), np.array(25.0))
    assert corner == pytest.approx(2.0 - np.hypot(2, 2))


def test_smooth_minimum_rounds_only_near_a_corner():
    assert smooth_minimum(np.array([1.0, 50.0]), 1.0) == pytest.approx(1.0)
    assert smooth_minimum(np.array([1.0, 1.0]), 1.0) == pytest.approx(1.0 - np.log(2))


@pytest.mark.parametrize("radius_um", [0.25, 0.7, 2.0])
def test_droplets_keep_their_volume_at_any_size(radius_um):
    grid = Grid((6, 8, 8), (2e-6, 3e-6, 3e-6))
    centre = np.array([[10.3e-6, 9.1e-6, 5.7e-6]])
    droplets = Droplets(centre, np.array([radius_um * MICRON]))
    fraction = droplets.volume_fraction(grid, (2, 3, 3))
    volume = fraction.sum(dtype=float) * 1e-18
    assert volume == pytest.approx(4 / 3 * np.pi * (radius_um * MICRON) ** 3, rel=1e-5)
    axes = grid.sub_positions((2, 3, 3))
    for axis, expected in enumerate(centre[0][::-1]):
        others = tuple(other for other in range(3) if other != axis)
        profile = fraction.sum(axis=others, dtype=float)
        found = (profile * axes[axis]).sum() / profile.sum()
        assert found == pytest.approx(expected, abs=0.5e-6 if radius_um < 0.5 else 0.15e-6)


def test_a_droplet_outside_the_grid_leaves_no_trace():
    grid = Grid((2, 2, 2), (2e-6, 2e-6, 2e-6))
    droplets = Droplets(np.array([[50e-6, 0, 1e-6]]), np.array([1e-6]))
    assert droplets.volume_fraction(grid, (1, 1, 1)).max() == 0


def test_of_touching_droplets_the_larger_stays():
    centres = np.array([[0, 0, 0], [1.5, 0, 0], [9, 0, 0]]) * MICRON
    kept = Droplets(centres, np.array([0.8, 1.0, 0.5]) * MICRON).apart()
    np.testing.assert_allclose(np.sort(kept.radii), np.array([0.5, 1.0]) * MICRON)
    assert len(Droplets(np.zeros((0, 3)), np.zeros(0)).apart().radii) == 0


def test_droplets_of_the_section_do_not_overlap(muscle):
    droplets = muscle.droplets
    assert 1000 < len(droplets.radii) < 10000
    assert len(droplets.apart().radii) == len(droplets.radii)
    assert droplets.radii.min() >= 0.25e-6 and droplets.radii.max() <= 2e-6


def test_ball_points_fill_the_ball_evenly():
    points = ball_points(24)
    assert (points**2).sum(axis=1).mean() == pytest.approx(3 / 5, rel=0.02)  # uniform ball


def test_too_small_a_section_is_refused_in_one_line():
    with pytest.raises(InputError, match="no mosaic") as caught:
        Muscle(MuscleSize((2, 8, 8))).specimen((1, 1, 1))
    assert "\n" not in str(caught.value)
