"""Static field shifts: simulated against superposition, found from the cube, taken out."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from recon import figures
from recon.cli import main
from recon.errors import InputError
from recon.grid import Grid
from recon.planning.tables import VariableDensity
from recon.priors import TotalVariation
from recon.protocol import SpectralAxis
from recon.quantify import ShiftEstimate, patterns_of
from recon.reconstruct import reconstruct
from recon.result import load_result
from recon.simulate import NoNoise, SimulationOptions, simulate
from recon.solvers.penalised import Penalised
from recon.solvers.replicas import Replicas
from recon.specimen import Specimen
from recon.spreading import FreeDiffusion
from recon.unknown import ComplexCube
from tests.test_agreement_of_modes import HELD, LINES, apparatus
from tests.test_quantify import KINDS, cube_of, patterns

GRID = Grid((1, 24, 24), (4e-6,) * 3)
TIMES = np.arange(1, 25) * 8e-3
AXIS = SpectralAxis.EVOLVE_THEN_ENCODE
Y, X = np.mgrid[-1:1:24j, -1:1:24j]
SHIFT = (18 * X + 12 * Y**2)[None]
"""From −18 to +30 Hz across the slice."""


def truth():
    maps = np.zeros((3, *GRID.shape), np.float32)
    maps[:2, :, 3:21, 3:21], maps[2, :, 12:22, 4:14] = [[[[40]]], [[[60]]]], 50
    return maps


def specimen(maps):
    return Specimen(GRID, LINES, maps, notes="invented")


def table(shots):
    return VariableDensity(shots=shots).protocol(GRID, TIMES, spectral_axis=AXIS)


def samples(maps, shift, protocol):
    options = SimulationOptions(photon_noise=NoNoise(), field_shift_Hz=shift)
    return simulate(specimen(maps), apparatus(), protocol, options=options).samples_in_memory()


def test_simulated_shifts_against_superposition():
    """One shift: the still record times exp(−i2πΔft). Two: the sum of two halves' records."""
    protocol, maps = table(3), truth()
    still = samples(maps, None, protocol)
    even = samples(maps, np.full(GRID.shape, 7.0), protocol)
    turn = np.exp(-2j * np.pi * 7.0 * TIMES)[:, None, None]
    np.testing.assert_allclose(even, still * turn, atol=2e-5 * np.abs(still).max())
    halves = np.where(np.arange(24) < 12, -20.0, 11.0) * np.ones(GRID.shape)
    both = samples(maps, halves, protocol)
    parts = [
        samples(maps * (halves == value), None, protocol)
        * np.exp(-2j * np.pi * value * TIMES)[:, None, None]
        for value in (-20.0, 11.0)
    ]
    np.testing.assert_allclose(both, parts[0] + parts[1], atol=3e-5 * np.abs(both).max())


@pytest.fixture(scope="module")
def shifted():
    options = SimulationOptions(field_shift_Hz=SHIFT)
    record = simulate(specimen(truth()), apparatus(), table(80), seed=1, options=options)
    prior = Penalised((TotalVariation(joint=True),), replicas=Replicas(8))
    return record, reconstruct(record, ComplexCube(), prior)


def half_width(cube, inside, centre_hz):
    """Full width at half maximum, Hz, of the mean spectrum's line, by zero filling."""
    mean = cube.values[:, inside].mean(axis=1)
    frequency = np.arange(-25, 25, 0.1) + centre_hz
    line = np.abs(np.exp(2j * np.pi * frequency[:, None] * cube.sample_times) @ mean)
    return 0.1 * int((line > line.max() / 2).sum())


def test_the_map_is_found_and_taken_out(shifted):
    """Residual shift below 0.5 Hz r.m.s. of 48; the line narrows to its own; amounts come right."""
    _, cube = shifted
    parts = patterns_of(LINES, apparatus(), cube)
    found = ShiftEstimate().estimate(cube, parts)
    inside = truth()[0] > 0
    off = (found.shift_Hz - SHIFT)[inside]
    assert np.sqrt((off**2).mean()) < 0.5
    assert np.abs(off).max() < 2.5
    assert np.sqrt(((off / found.standard_error_Hz[inside]) ** 2).mean()) < 3
    after = found.corrected(cube)
    centre = (3.0 - 4.7) * 1e-6 * cube.larmor_frequency
    courses = np.concatenate([part.courses for part in parts], axis=1)
    exact = replace(cube, values=np.tensordot(courses, truth(), 1).astype(np.complex64))
    widths = [half_width(one, inside, centre) for one in (cube, after, exact)]
    assert widths[1] < 1.15 * widths[2]
    assert widths[0] > 2 * widths[2]
    errors = [
        np.linalg.norm(HELD.fit(one, parts).amounts - truth()) / np.linalg.norm(truth())
        for one in (cube, after)
    ]
    assert errors[1] < 0.4 < 0.7 < errors[0]
    assert "static field shifts" in after.account.remarks[-1]


def test_exact_spectra_give_the_map_within_its_errors():
    y, x = np.mgrid[-1:1:12j, -1:1:16j]
    shift = (25 * x + 5 * x * y)[None] * np.ones((2, 1, 1))
    amounts = np.random.default_rng(5).uniform(5, 30, (len(KINDS), 2, 12, 16))
    cube = cube_of(amounts, shift=shift, snr=15)
    found = ShiftEstimate().estimate(cube, patterns(cube))
    z = (found.shift_Hz - shift) / found.standard_error_Hz
    assert found.degree == 2
    assert 0.3 < np.sqrt((z**2).mean()) < 2
    assert np.abs(found.shift_Hz - shift).max() < 0.1


def test_what_cannot_be_is_refused(shifted):
    _, cube = shifted
    parts = patterns_of(LINES, apparatus(), cube)
    found = ShiftEstimate().estimate(cube, parts)
    other = replace(found, grid=Grid((1, 24, 24), (5e-6,) * 3))
    with pytest.raises(InputError, match="another grid"):
        other.corrected(cube)
    noise = np.full(GRID.shape, 1e3 * float(np.abs(cube.values).max()))
    with pytest.raises(InputError, match="tell no shift"):
        ShiftEstimate().estimate(cube, parts, noise)
    with pytest.raises(InputError, match="not modelled"):
        SimulationOptions(field_shift_Hz=SHIFT, spreading=FreeDiffusion())
    with pytest.raises(InputError, match="one value per voxel"):
        samples(truth(), np.zeros((1, 7, 7)), table(1))


def test_verb_takes_shifts_out(shifted, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    record, cube = shifted
    record.save("record.h5")
    cube.save("cube.h5")
    main(["quantify", "cube.h5", "record.h5", "--field-shift", "--figures", "drawn"])
    assert "static field shifts from" in capsys.readouterr().out
    assert (tmp_path / "drawn" / "field-shift.png").exists()
    amounts = load_result("amounts.h5")
    off = np.linalg.norm(amounts.values - truth()) / np.linalg.norm(truth())
    assert off < 0.35


def test_it_can_be_drawn(shifted, tmp_path):
    _, cube = shifted
    found = ShiftEstimate().estimate(cube, patterns_of(LINES, apparatus(), cube))
    picture = figures.depth_stack(
        found.shift_Hz, found.standard_error_Hz, GRID, quantity="field shift", unit="Hz"
    )
    assert figures.save(picture, tmp_path / "shift.png").exists()
