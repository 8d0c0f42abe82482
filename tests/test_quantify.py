"""Fits of spectra: scatter meets bounds, nuisances are found, what blends is named."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import least_squares

from recon.basis import magnetisation_per_mM, time_course
from recon.cli import main
from recon.demo import instrument
from recon.errors import InputError
from recon.grid import Grid
from recon.quantify import (
    Baseline,
    CalibratedResponse,
    Fit,
    Nuisance,
    Pattern,
    ReferenceSpecies,
    patterns_of,
)
from recon.quantify.patterns import check_distinct, worst_pair
from recon.result import Account, Cube, load_result
from recon.species_table import species_named
from recon.specimen import Species

GRID = Grid((2, 12, 16), (4e-6,) * 3)
TIMES = np.arange(256) * 2e-3
HELD = Fit(shift_Hz=Nuisance(0.0), decay_per_s=Nuisance(0.0))


def species(name: str) -> Species:
    return Species(
        name=name,
        shift_ppm=1.0,
        equivalent_nuclei=species_named(name).protons,
        t2_star_ms=120.0,
        t1_s=1.0,
        diffusion_um2_per_ms=0.1,
        polarisation=0.01,
        spin_system=name,
    )


KINDS = tuple(species(name) for name in ("lactate", "creatine", "choline", "water"))


def cube_of(amounts, shift=0.0, decay=0.0, phase=0.0, extra=0.0, snr=30.0, seed=0, kinds=KINDS):
    """Exact spin signals of amounts (species, z, y, x) with nuisances, plus white noise."""
    courses = np.stack([time_course(s, instrument(), TIMES, 4.7) for s in kinds], axis=1)
    courses = courses * magnetisation_per_mM(kinds, instrument())
    t = TIMES[:, None, None, None]
    turn = 1j * phase - 2j * np.pi * shift * t - decay * t
    signal = np.tensordot(courses, amounts, 1) * np.exp(turn) + extra
    sigma = float(np.abs(np.tensordot(courses, amounts, 1)[0]).mean() / snr)
    rng = np.random.default_rng(seed)
    noise = rng.standard_normal(signal.shape) + 1j * rng.standard_normal(signal.shape)
    values = (signal + sigma * np.sqrt(0.5) * noise).astype(np.complex64)
    error = np.full(values.shape, sigma, np.float32)
    return Cube(
        GRID,
        values,
        Account("test"),
        error,
        sample_times=TIMES,
        larmor_frequency=instrument().larmor_frequency,
        reference_shift_ppm=4.7,
    )


@pytest.fixture(scope="module")
def amounts():
    drawn = np.random.default_rng(5).uniform(5, 30, (len(KINDS), *GRID.shape))
    drawn[3] = 25.0  # water is even
    return drawn


def patterns(cube, kinds=KINDS):
    return patterns_of(kinds, instrument(), cube)


def test_errors_are_the_scatter(amounts):
    """Scatter over 768 voxels within 7 % of the stated bound; 95 % intervals cover."""
    y, x = np.mgrid[-1:1:12j, -1:1:16j]
    shift = (9 * x + 6 * y)[None] * np.ones((2, 1, 1))
    cube = cube_of(amounts, shift=shift, decay=3.0)
    fitted = Fit().fit(cube, patterns(cube))
    z = (fitted.amounts - amounts) / fitted.standard_error
    np.testing.assert_allclose(z.std(axis=(1, 2, 3)), 1, atol=0.1)
    assert np.abs(z.mean(axis=(1, 2, 3))).max() < 0.15
    assert 0.92 < (np.abs(z) < 1.96).mean() < 0.98
    assert np.abs(fitted.shift_Hz - shift).mean() < 0.1
    assert fitted.decay_per_s.mean() == pytest.approx(3.0, abs=0.3)
    assert fitted.chi_squared.mean() == pytest.approx(1, abs=0.02)


def test_linear_fit_against_a_general_solver(amounts):
    """Without nuisances: numpy's least squares on stacked real and imaginary parts."""
    cube = cube_of(amounts)
    parts = patterns(cube)
    fitted = HELD.fit(cube, parts)
    courses = np.concatenate([p.courses for p in parts], axis=1)
    design = np.concatenate([courses.real, courses.imag])
    data = cube.values[:, 1, 3, 4]
    expected, *_ = np.linalg.lstsq(design, np.concatenate([data.real, data.imag]), rcond=None)
    np.testing.assert_allclose(fitted.amounts[:, 1, 3, 4], expected, rtol=1e-3)


def test_nonlinear_fit_against_scipy(amounts):
    """One voxel with shift, decay and phase, no ties: scipy's least_squares from the truth."""
    cube = cube_of(amounts, shift=4.0, decay=6.0, phase=0.2)
    free = Fit(
        shift_Hz=Nuisance(30.0),
        decay_per_s=Nuisance(60.0),
        phase_rad=Nuisance(1.0),
        iterations=30,
    )
    parts = patterns(cube)
    fitted = free.fit(cube, parts)
    courses = np.concatenate([p.courses for p in parts], axis=1)
    scale = np.abs(cube.values[0, 0, 2, 2])

    def rest(p):
        turn = np.exp(1j * p[6] - 2j * np.pi * p[4] * TIMES - p[5] * TIMES)
        off = (courses @ p[:4] * turn - cube.values[:, 0, 2, 2]) / scale
        return np.concatenate([off.real, off.imag])

    start = np.concatenate([amounts[:, 0, 2, 2], [4.0, 6.0, 0.2]])
    found = least_squares(rest, start, x_scale=np.abs(start)).x
    np.testing.assert_allclose(fitted.amounts[:, 0, 2, 2], found[:4], rtol=5e-3)
    assert fitted.shift_Hz[0, 2, 2] == pytest.approx(found[4], abs=0.02)
    assert fitted.decay_per_s[0, 2, 2] == pytest.approx(found[5], abs=0.1)


def test_lipid_groups_make_one_amount(amounts):
    """Parts `a: x` and `a: y` are fitted freely and reported as their sum, with its error."""
    first, second = (replace_name(KINDS[i], f"lipid: {i}") for i in (1, 2))
    kinds = (KINDS[0], first, second)
    cube = cube_of(amounts[:3], kinds=kinds)
    fitted = HELD.fit(cube, patterns(cube, kinds))
    assert fitted.names == ("lactate", "lipid")
    total = amounts[1] + amounts[2]
    z = (fitted.amounts[1] - total) / fitted.standard_error[1]
    assert z.std() == pytest.approx(1, abs=0.12)


def replace_name(one: Species, name: str) -> Species:
    return one.model_copy(update={"name": name})


def test_baseline_takes_broad_signal(amounts):
    """A broad signal biases amounts unless it is in the model."""
    size = np.abs(cube_of(amounts).values[0]).mean()
    broad = 0.5 * size * np.exp(-TIMES / 4e-3)[:, None, None, None]
    cube = cube_of(amounts, extra=broad)
    biased = HELD.fit(cube, patterns(cube))
    mended = replace(HELD, baseline=Baseline((4.0,))).fit(cube, patterns(cube))
    off = [np.abs((f.amounts - amounts) / f.standard_error).mean() for f in (biased, mended)]
    assert off[1] < 1.0 < 1.5 * off[1] < off[0]
    assert biased.chi_squared.mean() > 1.5
    assert "unknown line or baseline" in biased.failed_assumption()
    assert mended.failed_assumption() == ""


def test_a_shifted_line_is_named(amounts):
    cube = cube_of(amounts, shift=6.0)
    told = Fit(shift_Hz=Nuisance(30.0, 3.0)).fit(cube, patterns(cube)).failed_assumption()
    assert "shift" in told


def test_blended_patterns_are_refused_by_name(amounts):
    cube = cube_of(amounts)
    parts = patterns(cube)
    twin = Pattern("twin", parts[0].courses * np.exp(1e-4j * np.arange(256))[:, None])
    assert set(worst_pair([*parts, twin])[:2]) == {"lactate", "twin"}
    with pytest.raises(InputError, match="'lactate' and 'twin' cannot be told apart"):
        HELD.fit(cube, [*parts, twin])
    check_distinct(parts)


def test_scales_carry_their_error(amounts):
    cube = cube_of(amounts)
    fitted = HELD.fit(cube, patterns(cube))
    plain = fitted.names, fitted.amounts, fitted.standard_error
    _, wider = CalibratedResponse(0.1).apply(*plain)
    np.testing.assert_allclose(
        wider**2, fitted.standard_error**2 + (0.1 * fitted.amounts) ** 2, rtol=1e-5
    )
    known = float(amounts[3].mean())
    halved = fitted.names, 0.5 * fitted.amounts, 0.5 * fitted.standard_error
    scaled, error = ReferenceSpecies("water", known, 0.02).apply(*halved)
    assert scaled[0].mean() == pytest.approx(amounts[0].mean(), rel=0.05)
    assert (error > fitted.standard_error * 0.9).all()
    with pytest.raises(InputError, match="was not fitted"):
        ReferenceSpecies("fat", 1.0).apply(*plain)


def test_no_noise_no_fit(amounts):
    cube = replace(cube_of(amounts), standard_error=None)
    with pytest.raises(InputError, match="no standard errors"):
        HELD.fit(cube, patterns(cube))
    assert HELD.fit(cube, patterns(cube), noise_sd=np.ones(GRID.shape)).amounts.shape[0] == 4


def test_verb(tmp_path, monkeypatch, capsys):
    """From a simulated record: cube mode, then the fit, agrees with species mode."""
    monkeypatch.chdir(tmp_path)
    from recon.planning.tables import VariableDensity
    from recon.simulate import simulate
    from recon.specimen import Specimen
    from tests.test_grouped import PAIR  # single lines

    made = instrument().model_dump(exclude_none=True)
    made["camera"] = {"pixel_um": 4.0, "field_of_view_um": (64.0, 64.0)}
    apparatus = type(instrument()).model_validate(made)
    grid = Grid((1, 16, 16), (4e-6,) * 3)
    maps = np.zeros((2, 1, 16, 16), np.float32)
    maps[0, 0, 3:9, 3:9], maps[1, 0, 7:13, 6:13] = 40, 60
    specimen = Specimen(grid, PAIR, maps, notes="invented")
    protocol = VariableDensity(shots=60).protocol(grid, np.arange(24) * 8e-3)
    simulate(specimen, apparatus, protocol, path="record.h5", seed=1)
    main(["reconstruct", "record.h5", "--replicas", "8"])
    main(["reconstruct", "record.h5", "--cube", "--replicas", "8", "-o", "cube.h5"])
    main(["quantify", "cube.h5", "record.h5", "--shift-bound-Hz", "0", "--width-bound-Hz", "0"])
    assert "amounts.h5: 2 species" in capsys.readouterr().out
    fitted, direct = load_result("amounts.h5"), load_result("result.h5")
    for place in range(2):
        both = [np.linalg.norm(r.values[place] - maps[place]) for r in (fitted, direct)]
        assert max(both) < 0.4 * np.linalg.norm(maps[place])
    with pytest.raises(SystemExit) as leaving:
        main(["quantify", "cube.h5", "record.h5", "--reference", "a", "-o", "x.h5"])
    assert leaving.value.code == 2
    assert not Path("x.h5").exists()
