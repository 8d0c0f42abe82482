"""Spectra for the eye, their error bands, and the demonstration of two lines at one place."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest

from recon import figures
from recon.demo import instrument
from recon.demo_overlap import Overlap
from recon.errors import InputError
from recon.figures import Display
from recon.quantify.drawing import spectral_error, voxel_figure
from recon.result import load_result
from tests.test_quantify import GRID, HELD, KINDS, TIMES, cube_of, patterns

AMOUNTS = np.full((len(KINDS), *GRID.shape), 20.0)


def test_the_display_is_the_cubes_spectrum():
    """Without apodisation, at the cube's own points: the FFT's spectrum."""
    cube = cube_of(AMOUNTS)
    ppm, spectrum = cube.spectrum()
    made = Display().matrix(TIMES, ppm, cube.larmor_frequency, cube.reference_shift_ppm)
    expected = spectrum[:, 0, 2, 3]
    off = np.abs(made @ cube.values[:, 0, 2, 3] - expected)
    assert off.max() < 2e-3 * np.abs(expected).max()


def test_apodisation_widens_a_line_by_what_it_says():
    """A decaying exponential is a Lorentzian; exponential apodisation adds widths (closed form)."""
    times = np.arange(400) * 5e-3
    line = np.exp(-np.pi * 3.0 * times)
    for more in (0.0, 4.0):
        display = Display(more, 20)
        ppm = display.axis(times, 1e6, 0.0)
        real = (display.matrix(times, ppm, 1e6, 0.0) @ line).real
        width = (real > real.max() / 2).sum() * (ppm[1] - ppm[0])
        assert width == pytest.approx(3.0 + more, rel=0.02)


@pytest.mark.parametrize("dimensions", [256, 5])
def test_the_band_is_the_scatter(dimensions):
    """Monte Carlo: scatter of the displayed spectrum over voxels, also of a compressed cube."""
    rng = np.random.default_rng(1)
    clean = cube_of(AMOUNTS, snr=1e9)
    sigma = 0.1 * float(np.abs(clean.values[0]).mean())
    space = np.linalg.qr(rng.standard_normal((256, dimensions)) + 1j)[0]
    drawn = rng.standard_normal((2, dimensions, *GRID.shape)) * np.sqrt(0.5) * sigma
    noise = np.tensordot(space, drawn[0] + 1j * drawn[1], 1)
    error = sigma * np.linalg.norm(space, axis=1)[:, None, None, None] * np.ones(GRID.shape)
    cube = replace(
        clean, values=noise.astype(np.complex64), standard_error=error.astype(np.float32)
    )
    display = Display(2.0, 1)
    axis = display.axis(TIMES, cube.larmor_frequency, cube.reference_shift_ppm)
    matrix = display.matrix(TIMES, axis, cube.larmor_frequency, cube.reference_shift_ppm)
    seen = np.tensordot(matrix, cube.values, 1).real.std(axis=(1, 2, 3))
    stated = spectral_error(cube, matrix, (0, 0, 0))
    assert np.abs(seen / stated - 1).mean() < 0.06
    assert (seen / stated).mean() == pytest.approx(1, abs=0.04)


def test_a_voxel_is_drawn(tmp_path):
    cube = cube_of(AMOUNTS)
    parts = patterns(cube)
    picture = voxel_figure(cube, HELD.fit(cube, parts), parts, (1, 4, 5), Display(1.0))
    upper, lower = picture.axes
    assert lower.get_xlabel().startswith("chemical shift (ppm)")
    names = [text.get_text() for text in picture.legends[0].get_texts()]
    assert any(re.match(r"lactate .* ± .* mM", name) for name in names)
    data, fit = (np.asarray(line.get_ydata()) for line in upper.lines[:2])
    residual = np.asarray(lower.lines[0].get_ydata())
    np.testing.assert_allclose(residual, data - fit, atol=1e-9)
    assert figures.save(picture, tmp_path / "voxel.png").exists()


def test_what_cannot_be_drawn():
    axis = np.linspace(0, 5, 50)
    with pytest.raises(InputError, match="real spectrum"):
        figures.fitted_spectrum(axis, axis + 1j, axis, 1.0, unit="A/m s")
    with pytest.raises(InputError, match="not be negative"):
        Display(-1.0)
    with pytest.raises(InputError, match="no spectrum"):
        Display().axis(np.zeros(1), 1e6, 0.0)


def test_lactate_is_told_from_lipid(tmp_path):
    """The invented muscle at 0.1 T: errors as stated, and the doublet's use in a number."""
    told = Overlap(tmp_path, instrument()).run()
    assert "0.06 Hz apart" in told.lines[0]
    with_doublet, without = (
        float(found) for found in re.findall(r"([\d.]+) (?:by|were)", told.lines[0])
    )
    assert with_doublet < 10 < without
    inside = int(re.search(r"lactate.*?(\d+) % of voxels", told.lines[1])[1])
    assert inside >= 90
    assert "compatible" in told.lines[-1] or "compatible" in told.lines[-2]
    maps = load_result(tmp_path / "overlap-maps.h5")
    assert maps.names == ("water", "creatine", "lactate", "lipid CH2")
    assert len(list((tmp_path / "figures").glob("overlap-*.png"))) == 5
