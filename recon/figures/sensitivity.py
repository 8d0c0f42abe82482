"""How strongly the sensor answers to each spatial frequency, depth by depth."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style
from recon.grid import Grid

FloatArray = NDArray[np.floating]

DECADES = 5
"""Decades below the largest value that are drawn."""


def sensitivity(
    wavenumber: FloatArray, response: FloatArray, grid: Grid, *, quantity: str, unit: str
) -> Figure:
    """One line per depth against lateral wavenumber, with the wavelength on the upper axis.

    Parameters
    ----------
    wavenumber
        κ (K,), rad/m, ascending; zero is left out of the logarithmic axis.
    response
        (nz, K), not negative, in `unit`: for instance |response| in T per A/m, or 1 / error.
    grid
        Gives the heights and the highest wavenumber it can hold, drawn as a line.

    Raises
    ------
    InputError
        Shapes that do not fit, complex or negative values.
    """
    kappa, values = np.asarray(wavenumber), np.asarray(response)
    if values.shape != (grid.shape[0], kappa.size) or np.iscomplexobj(values):
        raise InputError(
            f"a response of shape {values.shape} and type {values.dtype}",
            "figure",
            f"give real values of shape ({grid.shape[0]}, {kappa.size})",
        )
    if not np.isfinite(values).all() or values.min() < 0 or not values.max() > 0:
        raise InputError(
            "the response must be finite, not negative, and somewhere positive", "figure"
        )
    shown = kappa > 0
    kappa, values = kappa[shown] * 1e-6, values[:, shown]
    with style.applied():
        figure = style.new_figure(0.72 * style.PAGE_WIDTH, 3.5)
        axes = figure.subplots()
        colours = style.depth_colours(grid.shape[0])
        for row, height, colour in zip(values, grid.heights, colours, strict=True):
            axes.plot(
                kappa, np.where(row > 0, row, np.nan), color=colour, label=style.micrometres(height)
            )
        axes.set_xscale("log")
        axes.set_yscale("log")
        top = float(values.max())
        axes.set_ylim(max(top * 10.0**-DECADES, 0.5 * _least(values)), 2 * top)
        axes.set_xlim(kappa[0], kappa[-1])
        axes.set_xlabel("lateral wavenumber κ (rad/µm)")
        axes.set_ylabel(f"{quantity} ({unit})")
        _wavelengths(axes)
        _nyquist(axes, grid)
        figure.legend(loc="outside right center", title="height z", reverse=True)
    return figure


def _least(values: FloatArray) -> float:
    return float(values[values > 0].min())


def _wavelengths(axes: Axes) -> None:
    def flip(wave: Any) -> Any:
        return 2 * np.pi / np.maximum(wave, 1e-9)

    upper = axes.secondary_xaxis("top", functions=(flip, flip))
    upper.set_xlabel("wavelength (µm)")
    upper.xaxis.set_major_formatter("{x:g}")


def _nyquist(axes: Axes, grid: Grid) -> None:
    limit = np.pi / max(grid.voxel[1:]) * 1e-6
    low, high = axes.get_xlim()
    if low < limit < high:
        axes.axvline(limit, color=style.FAINT, linewidth=0.8, linestyle=(0, (4, 2)))
        axes.annotate(
            "voxel limit", (limit, 0.03), xycoords=("data", "axes fraction"), xytext=(3, 0),
            textcoords="offset points", ha="left", va="bottom", rotation=90, fontsize=9,
            color="#505050", bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.5},
        )  # fmt: skip
