"""Weak lines beside water a thousand times as strong, from exact signals with noise."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from recon.cli.quantify import weak_species
from recon.demo import instrument
from recon.errors import InputError, InputWarning
from recon.quantify import Fit, LineRemoval, patterns_of
from tests.test_quantify import GRID, TIMES, cube_of, patterns, species

KINDS = tuple(species(name) for name in ("lactate", "creatine", "choline"))
WATER = species("water")
Y, X = np.mgrid[-1:1:12j, -1:1:16j]
SHIFT = (8 * X + 3 * Y)[None] * np.ones((2, 1, 1))
T = TIMES[:, None, None, None]


@pytest.fixture(scope="module")
def amounts():
    return np.random.default_rng(3).uniform(5, 30, (3, *GRID.shape))


def with_water(amounts, shape):
    """Cubes with and without water of 1000 times creatine's amplitude, and the water."""
    weak = cube_of(amounts, shift=SHIFT, kinds=KINDS, snr=20)
    parts = patterns(weak, KINDS)
    size = 1000 * 17 * np.abs(parts[1].courses[0]).max()
    width = 1 / np.random.default_rng(4).uniform(0.03, 0.04, GRID.shape)
    line = np.exp(-width * T)
    if shape == "two widths":
        line = 0.7 * line + 0.3 * np.exp(-2.5 * width * T + 2j * np.pi * 3 * T)
    water = size * line * np.exp(-2j * np.pi * SHIFT * T)
    return replace(weak, values=(weak.values + water).astype(np.complex64)), weak, water


def bias(fitted, amounts, kept=None):
    """Relative, of lactate, creatine and choline, over voxels that are kept."""
    kept = np.ones(GRID.shape, bool) if kept is None else kept
    off = (fitted.amounts[:3] - amounts)[:, kept].mean(axis=1)
    return off / amounts[:, kept].mean(axis=1)


def test_removal_leaves_the_weak_lines(amounts):
    """Bias below 2 % with it, more than the amount itself without it."""
    cube, weak, water = with_water(amounts, "one width")
    parts = patterns(weak, KINDS)
    left = LineRemoval().remove(cube, parts)
    fitted = Fit().fit(left.cube, parts)
    assert np.abs(bias(fitted, amounts)).max() < 0.02
    alone = Fit().fit(weak, parts)
    score = (fitted.amounts - amounts) / alone.standard_error
    assert np.sqrt((score**2).mean(axis=(1, 2, 3))).max() < 1.4
    both = [*parts, *patterns_of((WATER,), instrument(), cube)]
    assert np.abs(bias(Fit().fit(cube, both), amounts)).min() > 1
    assert np.abs(left.shift_Hz - SHIFT).max() < 0.2
    np.testing.assert_allclose(np.abs(left.amplitude), np.abs(water[0]), rtol=1e-3)
    assert "taken out" in left.cube.account.remarks[-1]


def test_a_line_of_two_widths(amounts):
    """Two overlapping parts 3 Hz apart: voxels where it fails are few, and seen as poor fits."""
    cube, weak, _ = with_water(amounts, "two widths")
    parts = patterns(weak, KINDS)
    fitted = Fit().fit(LineRemoval().remove(cube, parts).cube, parts)
    good = ~fitted.poor(1e-5)
    assert good.mean() > 0.93
    assert np.abs(bias(fitted, amounts)).max() < 0.05
    assert np.abs(bias(fitted, amounts, good)).max() < 0.03


def test_nothing_strong_is_said(amounts):
    weak = cube_of(amounts, kinds=KINDS, snr=20)
    with pytest.warns(InputWarning, match=r"no line near 4.7 ppm is much stronger"):
        LineRemoval().remove(weak, patterns(weak, KINDS))


def test_water_is_left_out_of_the_list(amounts):
    cube = cube_of(amounts, kinds=KINDS)
    found = weak_species((*KINDS, WATER), instrument(), cube, LineRemoval())
    assert found == list(KINDS)


def test_bad_input(amounts):
    cube = cube_of(amounts, kinds=KINDS)
    uneven = replace(cube, sample_times=TIMES**1.01)
    with pytest.raises(InputError, match="not evenly spaced"):
        LineRemoval().remove(uneven)
    short = replace(cube, values=cube.values[:10], sample_times=TIMES[:10], standard_error=None)
    with pytest.raises(InputError, match="too few"):
        LineRemoval().remove(short)
    with pytest.raises(InputError, match="positive"):
        LineRemoval(half_width_Hz=0)
