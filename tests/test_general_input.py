"""What the general model refuses, in one line each, and its small helpers."""

from __future__ import annotations

import numpy as np
import pytest

from recon.errors import InputError
from recon.forward.channels import Channels, LayerDensity
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.off_lattice import calibrated, nearest_steps
from recon.forward.wide import Window, widened
from recon.grid import Grid
from recon.solvers.conjugate_gradients import ConjugateGradients
from recon.solvers.graded import Levels
from recon.solvers.robust import Trust
from recon.symbol import Symbol
from tests.cases import BASES, NOISE, instrument, protocol

GRID = Grid((2, 4, 6), (1e-6, 1e-6, 1e-6))
ONES = np.ones((4, 6))


def build(grid=GRID, table=None, noise=NOISE, pixel_um=1.0, **realities):
    table = protocol(GRID, True, True, (1,)) if table is None else table
    apparatus = instrument(grid=GRID, pixel_um=pixel_um)
    return GeneralModel.build(grid, apparatus, table, BASES["decays"], noise, **realities)


BAD = {
    "gain and weight of different shapes": lambda: Channels(ONES, np.ones((4, 5))),
    "gain that is not finite": lambda: Channels(ONES * np.nan, ONES),
    "negative weight": lambda: Channels(ONES, -ONES),
    "all channels dead": lambda: Channels(ONES, 0 * ONES),
    "gain map of the wrong shape": lambda: Channels.ideal((4, 6)).with_gain(np.ones((6, 4))),
    "noise of zero": lambda: Channels.ideal((4, 6)).with_noise(0 * ONES),
    "negative density": lambda: LayerDensity(-ONES),
    "density that is not finite": lambda: LayerDensity(ONES * np.inf),
    "channel maps for another camera": lambda: build(channels=Channels.ideal((6, 4))),
    "density on another grid": lambda: build(layer=LayerDensity(np.ones((3, 3)))),
    "noise_sd of zero": lambda: build(noise=0.0),
    "view larger than the grid": lambda: build(margin=(1, 0)),
    "margin of half a pixel": lambda: build(widened(GRID, (1, 1)), pixel_um=2.0, margin=(1, 1)),
    "pixels that split voxels": lambda: Window.of(
        Grid((1, 4, 4), (1e-6, 1.5e-6, 1.5e-6)), instrument(grid=GRID, pixel_um=1.0), (0, 0)
    ),
    "negative margin": lambda: widened(GRID, (-1, 0)),
    "wavevector beyond Nyquist": lambda: build(
        table=calibrated(protocol(GRID, True, False, (1,)), 9 * np.eye(3))
    ),
    "wavevector that is not finite": lambda: nearest_steps(
        np.array([[np.nan, 0.0]]), GRID, "nuclear", True
    ),
    "matrix of the wrong size": lambda: calibrated(protocol(GRID, True, False, (1,)), np.eye(2)),
    "courses of the wrong shape": lambda: build(courses=np.ones((5, 1, 2), complex)),
    "object of the wrong shape": lambda: GeneralOperator(build()).apply(np.zeros((1, 2, 4, 6))),
    "samples of the wrong shape": lambda: GeneralOperator(build()).adjoint(np.zeros((5, 4, 4, 5))),
    "threshold of zero": lambda: Trust(threshold=0.0),
}


@pytest.mark.parametrize("name", BAD)
def test_bad_input_is_one_line(name):
    with pytest.raises(InputError) as caught:
        BAD[name]()
    assert "\n" not in str(caught.value) and len(str(caught.value)) > 10


def test_conjugate_gradients_refuse_priors():
    class WithPriors:
        terms = (object(),)

    with pytest.raises(InputError, match="ADMM"):
        ConjugateGradients(Symbol(1.0)).start(WithPriors(), None)


def test_channels_compose():
    gain = np.full((4, 6), 0.5j)
    dead = np.zeros((4, 6), bool)
    dead[1, 2] = True
    channels = Channels.ideal((4, 6)).with_gain(gain).with_noise(2 * ONES).without(dead)
    assert channels.alive == 23
    assert channels.information[1, 2] == 0
    assert channels.information[0, 0] == pytest.approx(0.25 / 4)
    assert build(channels=channels).sample_count == 5 * 4 * 23


def test_crop_and_fill_are_adjoint():
    window = Window((1, 1), (5, 7), (1, 2), (3, 4))
    rng = np.random.default_rng(0)
    a, b = rng.standard_normal((2, 5, 7)), rng.standard_normal((2, 3, 4))
    assert np.vdot(window.crop(a), b) == pytest.approx(np.vdot(a, window.fill(b)))


def test_levels_span_the_information():
    levels = Levels(ratio=10, floor=1e-3).of(np.array([[[1e-9, 0.5, 2.0]]]))
    assert levels[0] == pytest.approx(2e-3) and levels[-1] == pytest.approx(2.0)
    assert (levels[1:] / levels[:-1] <= 10.001).all()
    assert len(Levels().of(np.array([[[1.0, 1.01]]]))) == 1
