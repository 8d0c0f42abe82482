"""What every picture must have: units, a scale bar, one scale per quantity, vector output."""

from __future__ import annotations

import numpy as np
import pytest

from recon import figures
from recon.errors import InputError
from recon.grid import Grid
from tests import results

GRID = results.grid()
MAPS = results.maps()


def texts(figure) -> str:
    """All text of a figure."""
    import matplotlib.text

    found = figure.findobj(matplotlib.text.Text)
    return " | ".join(one.get_text() for one in found if one.get_text())


def comparison():
    columns = {"ridge": MAPS.values[0], "sparse": MAPS.values[0] + 1}
    return figures.comparison(
        columns, GRID, quantity="lactate", unit="mM", truth=MAPS.values[0] - 1
    )


def depth_stack():
    return figures.depth_stack(
        MAPS.values[0], MAPS.standard_error[0], GRID, quantity="lactate", unit="mM"
    )


def spectrum():
    ppm, values = results.cube().spectrum()
    curve = values[:, 0, 0, 0].real
    return figures.spectrum(
        ppm, {"fit": curve}, unit="A/m s", errors={"fit": np.full(len(ppm), 0.1)}, grid=GRID,
        voxel=(0, 0, 0),
    )  # fmt: skip


def coverage():
    k = np.array([[1e5, 2e5, 3e5], [-1e5, 0, 0]])
    return figures.coverage(k, np.zeros((2, 2)), np.array([1, 2]), GRID)


def sensitivity():
    kappa = np.geomspace(1e4, 1e6, 20)
    response = np.exp(-kappa * GRID.heights[:, None]) * kappa
    return figures.sensitivity(kappa, response, GRID, quantity="response", unit="T per A/m")


def history():
    course = figures.Progress(np.array([3.0, 2.0, 1.5]), np.array([2.0, 1.2, 1.0]))
    return figures.history({"ADMM": course})


def verdicts():
    return figures.verdicts(
        [
            figures.Verdict("standoff", "nm", 104.0, 3.0, 100.0, 10.0),
            figures.Verdict("layer thickness", "µm", 2.6, 0.05, 2.0, 0.2),
            figures.Verdict("gradient strength along x", "mT/m", 985.0, 2.0, 1000.0, 20.0),
        ]
    )


def test_verdicts_in_words():
    """Within allowance and two standard errors, or off by how much."""
    good = figures.Verdict("standoff", "nm", 104.0, 3.0, 100.0, 10.0)
    bad = figures.Verdict("standoff", "nm", 140.0, 3.0, 100.0, 10.0)
    assert "within expectation" in str(good)
    assert "off by +40 nm" in str(bad)


CASES = {
    "comparison": (comparison, ("lactate (mM)", "error (mM)", "µm", "truth")),
    "depth_stack": (depth_stack, ("mM", "standard error", "µm", "height above the diamond")),
    "spectrum": (spectrum, ("chemical shift (ppm)", "A/m s", "µm")),
    "coverage": (coverage, ("rad/µm", "sensing axis")),
    "sensitivity": (sensitivity, ("rad/µm", "T per A/m", "µm")),
    "verdicts": (verdicts, ("standoff", "104 ± 3 nm", "deviation")),
    "history": (history, ("iteration", "gap")),
}


@pytest.mark.parametrize("name", CASES)
def test_units_and_names_are_on_it(name):
    draw, wanted = CASES[name]
    found = texts(draw())
    for word in wanted:
        assert word in found, (word, found)


@pytest.mark.parametrize("ending", ["png", "pdf", "svg"])
def test_the_same_figure_gives_the_same_bytes(tmp_path, ending):
    first = figures.save(comparison(), tmp_path / f"a.{ending}").read_bytes()
    assert first == figures.save(comparison(), tmp_path / f"b.{ending}").read_bytes()


def test_one_scale_for_one_quantity():
    """Truth and reconstructions share limits; errors are symmetric about zero."""
    axes = [axis for axis in comparison().axes if axis.images]
    limits = {axis.images[0].get_clim() for axis in axes}
    assert len(limits) == 2
    assert any(low == -high for low, high in limits)


def test_planes_lie_as_in_the_slice():
    """The highest plane is drawn at the top."""
    figure = depth_stack()
    labels = [axis.get_ylabel() for axis in figure.axes if axis.get_ylabel()]
    assert labels[0] == "11 µm"
    assert labels[-1] == "3 µm"


def test_many_planes_stay_on_one_page():
    many = Grid((20, 4, 5), GRID.voxel)
    values = np.ones(many.shape)
    figure = figures.depth_stack(values, values, many, quantity="lactate", unit="mM")
    assert figure.get_size_inches()[1] <= 9.01
    labels = [axis.get_ylabel() for axis in figure.axes if axis.get_ylabel()]
    assert (labels[0], labels[-1], len(labels)) == ("78 µm", "2 µm", 8)


@pytest.mark.parametrize(
    "make",
    [
        lambda: figures.comparison({}, GRID, quantity="a", unit="mM"),
        lambda: figures.comparison({"a": MAPS.values[0] * 1j}, GRID, quantity="a", unit="mM"),
        lambda: figures.depth_stack(
            MAPS.values[0, :2], MAPS.values[0], GRID, quantity="a", unit="mM"
        ),
        lambda: figures.save(comparison(), "figure.bmp"),
    ],
)
def test_refusals(make):
    with pytest.raises(InputError):
        make()
