"""Species mode against cube mode followed by the fit, on simulated records; what fails is named."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from recon.cli import main
from recon.demo import instrument
from recon.errors import InputError
from recon.grid import Grid
from recon.planning.tables import VariableDensity
from recon.priors import NonNegative, TotalVariation
from recon.protocol import SpectralAxis
from recon.quantify import Fit, Nuisance, compare, patterns_of, refused
from recon.reconstruct import reconstruct
from recon.result import Account, Cube, load_result
from recon.simulate import simulate
from recon.solvers.penalised import Penalised
from recon.solvers.replicas import Replicas
from recon.specimen import Species, Specimen
from recon.unknown import ComplexCube, SpeciesAmounts
from tests.test_quantify import KINDS, TIMES, cube_of, patterns

GRID = Grid((2, 24, 24), (4e-6,) * 3)
HELD = Fit(shift_Hz=Nuisance(0.0), decay_per_s=Nuisance(0.0))


def line(name, ppm, t2_star_ms=120.0, diffusion=0.2):
    return Species(
        name=name,
        shift_ppm=ppm,
        equivalent_nuclei=3,
        t2_star_ms=t2_star_ms,
        t1_s=1.0,
        diffusion_um2_per_ms=diffusion,
        polarisation=0.01,
    )


LINES = (line("a", 1.3), line("b", 3.0), line("c", 2.2, 80.0))


def apparatus():
    made = instrument().model_dump(exclude_none=True)
    made["camera"] = {"pixel_um": 4.0, "field_of_view_um": (96.0, 96.0)}
    return type(instrument()).model_validate(made)


def measured():
    maps = np.zeros((3, *GRID.shape), np.float32)
    maps[0, :, 3:13, 3:13], maps[1, :, 7:20, 9:18], maps[2, :, 12:22, 4:14] = 40, 60, 50
    specimen = Specimen(GRID, LINES, maps, notes="invented")
    times = np.arange(1, 33) * 8e-3
    axis = SpectralAxis.EVOLVE_THEN_ENCODE
    protocol = VariableDensity(shots=80).protocol(GRID, times, spectral_axis=axis)
    return simulate(specimen, apparatus(), protocol, seed=1)


@pytest.fixture(scope="module")
def record():
    return measured()


def cube_from(record):
    prior = Penalised((TotalVariation(joint=True),), replicas=Replicas(12))
    return reconstruct(record, ComplexCube(), prior)


@pytest.fixture(scope="module")
def cube(record):
    return cube_from(record)


def compared(record, cube, kinds):
    """Both modes with the species as assumed."""
    prior = Penalised((TotalVariation(), NonNegative()), replicas=Replicas(12))
    maps = reconstruct(record, SpeciesAmounts(kinds), prior)
    parts = patterns_of(kinds, apparatus(), cube)
    return compare(maps, HELD.fit(cube, parts), cube, parts)


def test_a_record_that_obeys_the_model_is_compatible(record, cube):
    found = compared(record, cube, LINES)
    assert found.compatible, found.remarks()
    assert found.failed_assumption == ""
    assert max(found.spread) < 3
    assert found.remarks()[0].endswith("compatible")


@pytest.mark.parametrize(
    "assumed, told",
    [
        ((LINES[0], line("b", 3.0 + 10 / 10.64), LINES[2]), "line position of b: off by -10 Hz"),
        (LINES[:2], "unlisted line: at 2.2"),
        ((line("a", 1.3, 60.0), *LINES[1:]), "line width of a: -"),
    ],
    ids=["shift", "missing", "decay"],
)
def test_the_assumption_that_failed_is_named(record, cube, assumed, told):
    """10 Hz off, a species left out, T2* of 60 ms for 120 ms."""
    found = compared(record, cube, assumed)
    assert not found.compatible
    assert found.failed_assumption.startswith(told)
    assert told in found.remarks()[0]


def test_diffusion_is_named():
    """Lateral waves that decay as exp(−D u² t) each, summed directly, D of one species stated."""
    maps = 30.0 * (np.random.default_rng(2).random((3, *GRID.shape)) > 0.5)
    times = np.arange(1, 65) * 4e-3
    clean = Cube(
        GRID,
        np.zeros((64, *GRID.shape), np.complex64),
        Account("test"),
        sample_times=times,
        larmor_frequency=apparatus().larmor_frequency,
        reference_shift_ppm=4.7,
    )
    parts = patterns_of(LINES, apparatus(), clean)
    wave = 2 * np.pi * np.fft.fftfreq(24, 4e-6)
    square = wave[:, None] ** 2 + wave**2
    signal = np.zeros((64, *GRID.shape), complex)
    for place, diffusion in enumerate((0.05e-9, 0.0, 0.0)):
        left = np.exp(-diffusion * square * times[:, None, None])
        spread = np.fft.ifft2(np.fft.fft2(maps[place])[None] * left[:, None])
        signal += parts[place].courses[:, :1, None, None] * spread
    sigma = 0.1 * float(np.abs(signal[0]).mean())
    random = np.random.default_rng(0).standard_normal((2, *signal.shape)) * np.sqrt(0.5)
    values = (signal + sigma * (random[0] + 1j * random[1])).astype(np.complex64)
    error = np.full(values.shape, sigma, np.float32)
    told = refused(replace(clean, values=values, standard_error=error), parts)
    assert (told[0].assumption, told[0].species) == ("diffusion", "a")
    assert told[0].value == pytest.approx(0.05, rel=0.5)


@pytest.fixture(scope="module")
def amounts():
    return np.random.default_rng(5).uniform(5, 30, (len(KINDS), 2, 12, 16))


def test_exact_spectra_are_not_refused(amounts):
    cube = cube_of(amounts)
    assert refused(cube, patterns(cube)) == []


@pytest.mark.parametrize(
    "nuisance, kind, value",
    [
        ({"shift": 2.0}, "line position", 2.0),
        ({"decay": 5.0}, "line width", 5 / np.pi),
        ({"phase": 0.5}, "phase", 0.5),
    ],
)
def test_common_failures_are_named_and_measured(amounts, nuisance, kind, value):
    cube = cube_of(amounts, **nuisance)
    worst = refused(cube, patterns(cube))[0]
    assert (worst.assumption, worst.species) == (kind, "all species")
    assert worst.value == pytest.approx(value, rel=0.15)


def test_a_single_species_is_named(amounts):
    cube = cube_of(amounts)
    parts = patterns(cube)
    turned = parts[1].courses * np.exp(-2j * np.pi * TIMES)[:, None]
    worst = refused(cube, [parts[0], replace(parts[1], courses=turned), *parts[2:]])[0]
    assert (worst.assumption, worst.species) == ("line position", "creatine")
    assert worst.value == pytest.approx(-1, abs=0.2)


def test_comparison_needs_like_results(record, cube):
    parts = patterns_of(LINES, apparatus(), cube)
    fitted = HELD.fit(cube, parts)
    maps = reconstruct(record, None, Penalised((TotalVariation(),), replicas=None))
    with pytest.raises(InputError, match="no standard errors"):
        compare(maps, fitted)
    other = replace(fitted, amounts=fitted.amounts[:, :1])
    with pytest.raises(InputError, match="one record"):
        compare(maps, other)


def test_verb_compares(record, cube, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    record.save("record.h5")
    cube.save("cube.h5")
    main(["reconstruct", "record.h5", "--replicas", "8"])
    held = ["--shift-bound-Hz", "0", "--width-bound-Hz", "0"]
    drawn = ["--figures", "drawn", "--voxel", "0,5,5", *held]
    main(["quantify", "cube.h5", "record.h5", "--maps", "result.h5", *drawn])
    out = capsys.readouterr().out
    assert "compatible" in out and "ICH Q2" in out
    made = load_result("amounts.h5")
    assert any("compatible" in remark for remark in made.account.remarks)
    assert made.account.provenance["limits"]["a"]["detection_mM"][0] > 0
    assert (tmp_path / "drawn" / "labels.png").exists()
    assert (tmp_path / "drawn" / "voxel-0-5-5.png").exists()
    for voxel, told in (("0,5", "z,y,x"), ("0,24,0", "at most 1,23,23")):
        with pytest.raises(SystemExit):
            main(["quantify", "cube.h5", "record.h5", "--voxel", voxel])
        assert told in capsys.readouterr().err
