"""Limits of detection, and labels that say why a voxel is not worth reading."""

from __future__ import annotations

import json
import tracemalloc
from dataclasses import replace

import nibabel
import numpy as np
import pytest

from recon import figures
from recon.errors import InputError
from recon.handover.dataset import Delivery
from recon.labels import Labels, Readability
from recon.quantify import Fit, Nuisance, ReferenceSpecies, labels, limits
from recon.result import Account, SpeciesMaps, load_result
from tests.test_quantify import GRID, HELD, KINDS, TIMES, cube_of, patterns, species

SHAPE = (len(KINDS), *GRID.shape)


def full(level=20.0):
    return np.full(SHAPE, level)


def blank_cube(missing, seed=1):
    """No amount of one species; noise as in the others' cube."""
    amounts = full()
    amounts[missing] = 0
    return cube_of(amounts, seed=seed)


def test_limits_are_the_scatter_of_a_blank():
    """3.3 and 10 times the measured scatter over voxels without the species (ICH Q2(R1))."""
    cube = blank_cube(1)
    fitted = Fit(shift_Hz=Nuisance(30.0, 3.0)).fit(cube, patterns(cube))
    scatter = fitted.amounts[1].std(axis=(1, 2))
    reach = limits(fitted)
    np.testing.assert_allclose(reach.detection[1], 3.3 * scatter, rtol=0.15)
    np.testing.assert_allclose(reach.quantification[1], 10 * scatter, rtol=0.15)
    false = (labels(fitted).values[1] != Readability.BELOW_DETECTION).mean()
    assert false < 0.01  # 0.13 % of a normal law lie above 3 standard deviations


def test_a_blank_has_an_error_of_its_own():
    """A free width enlarges an amount's error; of a blank it knows nothing."""
    cube = cube_of(full())
    alone = patterns(cube)[:1]
    course = 20 * alone[0].courses.sum(axis=1)
    cube = replace(cube, values=cube.values * 0 + course[:, None, None, None])
    rng = np.random.default_rng(0)
    sigma = float(cube.standard_error.max())
    noise = rng.standard_normal((2, *cube.values.shape)) * sigma * np.sqrt(0.5)
    cube = replace(cube, values=(cube.values + noise[0] + 1j * noise[1]).astype(np.complex64))
    fitted = Fit(shift_Hz=Nuisance(0.0), decay_per_s=Nuisance(60.0)).fit(cube, alone)
    assert (fitted.blank_error < 0.95 * fitted.standard_error).all()
    held = HELD.fit(cube, alone)
    np.testing.assert_allclose(fitted.blank_error, held.standard_error, rtol=0.1)


def test_amounts_are_sorted_by_the_limits():
    amounts = full(0.0)
    amounts[3] = 25.0
    fitted = HELD.fit(cube_of(full()), patterns(cube_of(full())))
    spread = fitted.standard_error[0].mean()
    amounts[0, 0], amounts[0, 1] = 6 * spread, 16 * spread
    sigma = cube_of(full()).standard_error
    cube = replace(cube_of(amounts, snr=1e3), standard_error=sigma)
    found = labels(HELD.fit(cube, patterns(cube))).values
    assert (found[0, 0] == Readability.DETECTED).all()
    assert (found[0, 1] == Readability.QUANTIFIABLE).all()
    assert (found[1] == Readability.BELOW_DETECTION).all()


def test_poor_fits_are_labelled():
    """An unlisted line in some voxels; elsewhere noise is called poor once in 1e5 voxels."""
    cube = cube_of(full())
    extra = 0.3 * np.abs(cube.values[0, 0, 0, 0]) * np.exp(2j * np.pi * 90 * TIMES - TIMES / 0.1)
    values = cube.values.copy()
    values[:, 0, :4] += extra[:, None, None].astype(np.complex64)
    found = labels(HELD.fit(replace(cube, values=values), patterns(cube))).values
    assert (found[:, 0, :4] == Readability.POOR_FIT).all()
    assert (found[:, 0, 4:] != Readability.POOR_FIT).all()
    assert (found[:, 1] != Readability.POOR_FIT).all()


def test_a_nuisance_at_its_bound_is_labelled():
    shift = np.zeros(GRID.shape)
    shift[:, :, 8:] = 3.0
    cube = cube_of(full(), shift=shift, snr=3)
    fit = Fit(shift_Hz=Nuisance(2.0), decay_per_s=Nuisance(0.0))
    found = labels(fit.fit(cube, patterns(cube))).values
    told = (Readability.NUISANCE_AT_BOUND, Readability.POOR_FIT)
    assert np.isin(found[..., 8:], told).all()
    assert (found[..., 8:] == Readability.NUISANCE_AT_BOUND).mean() > 0.3
    assert not np.isin(found[..., :8], told).any()


def test_blended_species_name_each_other():
    """Two lines 0.3 Hz apart under 2.7 Hz of width: neither is known, their sum is."""
    made = species("acetate")
    near = made.model_copy(update={"name": "near", "spin_system": None, "equivalent_nuclei": 3})
    first = near.model_copy(update={"name": "a", "shift_ppm": 1.900})
    second = near.model_copy(update={"name": "b", "shift_ppm": 1.928})
    kinds = (first, second, KINDS[3])
    amounts = np.full((3, *GRID.shape), 20.0)
    cube = cube_of(amounts, kinds=kinds, snr=8)
    fitted = HELD.fit(cube, patterns(cube, kinds))
    assert fitted.correlation[:2].min() > 0.95
    found = labels(fitted)
    share = (found.values[0] == Readability.BLENDED + 1).mean()
    assert share > 0.8
    assert "blended with b" in found.meaning[Readability.BLENDED + 1]
    assert (found.values[2] < Readability.BLENDED).all()


def test_voxels_of_unknown_noise_hold_no_information():
    cube = cube_of(full())
    noise = np.full(GRID.shape, float(cube.standard_error.max()))
    noise[1, 2:4] = np.inf
    fitted = HELD.fit(cube, patterns(cube), noise_sd=noise)
    found = labels(fitted).values
    assert (found[:, 1, 2:4] == Readability.NO_INFORMATION).all()
    assert (found[:, 1, 4:] != Readability.NO_INFORMATION).all()
    assert np.isfinite(limits(fitted).detection).all()
    noise[0] = np.nan
    reach = limits(HELD.fit(cube, patterns(cube), noise_sd=noise))
    assert np.isinf(reach.detection[:, 0]).all()


def test_a_scale_moves_the_limits_along():
    cube = cube_of(full())
    fitted = HELD.fit(cube, patterns(cube))
    doubled = ReferenceSpecies("water", 40.0, 0.1).on(fitted)
    np.testing.assert_allclose(doubled.blank_error / fitted.blank_error, 2, rtol=0.02)
    assert (doubled.standard_error[3] > 2 * fitted.standard_error[3]).all()


def test_noise_of_a_compressed_cube_lies_in_its_vectors():
    """Noise in 6 of 256 dimensions, stated per time: scatter of amounts equals the errors."""
    rng = np.random.default_rng(4)
    clean = cube_of(full(), snr=1e9)
    courses = np.concatenate([p.courses for p in patterns(clean)], axis=1)
    more = rng.standard_normal((256, 2)) + 1j * rng.standard_normal((256, 2))
    space, _ = np.linalg.qr(np.concatenate([courses, more], axis=1))
    sigma = 0.1 * np.abs(clean.values[0]).mean()
    drawn = rng.standard_normal((2, 6, *GRID.shape)) * np.sqrt(0.5) * sigma
    noise = np.tensordot(space, drawn[0] + 1j * drawn[1], 1)
    error = sigma * np.linalg.norm(space, axis=1)[:, None, None, None] * np.ones(GRID.shape)
    signal = np.tensordot(courses, full(), 1)
    cube = replace(
        clean,
        values=(signal + noise).astype(np.complex64),
        standard_error=error.astype(np.float32),
    )
    fitted = HELD.fit(cube, patterns(cube))
    z = (fitted.amounts - full()) / fitted.standard_error
    np.testing.assert_allclose(z.std(axis=(1, 2, 3)), 1, atol=0.1)
    assert fitted.chi_squared.mean() == pytest.approx(1, abs=0.1)


def test_labels_are_kept_handed_over_and_drawn(tmp_path):
    cube = cube_of(full())
    fitted = HELD.fit(cube, patterns(cube))
    made = labels(fitted)
    maps = SpeciesMaps(
        GRID,
        fitted.amounts,
        Account("test"),
        fitted.standard_error,
        names=fitted.names,
        labels=made,
    )
    maps.save(tmp_path / "amounts.h5")
    back = load_result(tmp_path / "amounts.h5")
    np.testing.assert_array_equal(back.labels.values, made.values)
    assert back.labels.meaning == made.meaning
    Delivery(back).write(tmp_path / "d")
    folder = tmp_path / "d" / "derivatives" / "nearspin" / "sub-01" / "mrs"
    image = nibabel.load(folder / "sub-01_desc-lactateLabels_mrsmap.nii.gz")
    np.testing.assert_array_equal(np.asarray(image.dataobj).T, made.values[0])
    told = json.loads((folder / "sub-01_desc-lactateLabels_mrsmap.json").read_text())
    assert "blank" in told["Labels"]["1"]
    picture = figures.label_maps(made, fitted.names, GRID)
    assert figures.save(picture, tmp_path / "labels.png").stat().st_size > 1000
    with pytest.raises(InputError, match="one map per species"):
        figures.label_maps(Labels(made.values[:1], made.meaning), fitted.names, GRID)


def test_memory_is_foreseen(tmp_path):
    """Within a factor of 3 of what Python's own account of allocations says, and refused before."""
    cube = cube_of(full())
    parts = patterns(cube)
    tracemalloc.start()
    HELD.fit(cube, parts)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    need = HELD.memory(cube, parts)
    assert need / 3 < peak < 6 * need  # chunks in work weigh much in so small a cube
    with pytest.raises(InputError, match=r"needs about .* the limit is 0.001 GiB"):
        HELD.fit(cube, parts, memory_limit_gib=1e-3)
