"""All planes of one quantity, lowest at the bottom as they lie, with the error beside each."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.figures import style
from recon.figures.maps import amount_limits, checked
from recon.grid import Grid

FloatArray = NDArray[np.floating]
COLUMNS = 2
MOST_PLANES = 8
TALLEST = 9.0


def depth_stack(
    values: FloatArray,
    standard_error: FloatArray,
    grid: Grid,
    *,
    quantity: str,
    unit: str,
) -> Figure:
    """Amounts at the left, standard errors at the right, one scale per column.

    Of more than eight planes, eight are drawn, the lowest and the highest among them.

    Parameters
    ----------
    values, standard_error
        (nz, ny, nx), real, in `unit`.

    Raises
    ------
    InputError
        Maps that are complex or do not fit the grid.
    """
    checked({quantity: values, "standard error": standard_error}, grid, None)
    nz = min(grid.shape[0], MOST_PLANES)
    planes = np.linspace(0, grid.shape[0] - 1, nz).round().astype(int)
    left, right, bottom, top = style.extent_um(grid)
    aspect = (top - bottom) / (right - left)
    panel = min(1.35, (TALLEST - 1.15) / (nz * aspect))
    with style.applied():
        figure = style.new_figure(COLUMNS * max(panel, 1.35) + 0.5, nz * panel * aspect + 1.15)
        axes: NDArray[Any] = figure.subplots(nz, COLUMNS, squeeze=False)
        for column, (name, maps) in enumerate(
            {quantity: values, "standard error": standard_error}.items()
        ):
            _column(figure, axes[:, column], name, [maps[row] for row in planes], grid, unit)
        for row, panel_axes in zip(planes, axes[::-1, 0], strict=True):
            panel_axes.set_ylabel(style.micrometres(grid.heights[row]))
        style.scale_bar(axes[-1, 0])
        figure.supylabel("height above the diamond", fontsize=10)
    return figure


def _column(
    figure: Figure,
    axes: NDArray[Any],
    name: str,
    planes: Sequence[FloatArray],
    grid: Grid,
    unit: str,
) -> None:
    """Planes from the lowest axes upwards on one colour scale, with its bar."""
    low, high = amount_limits(planes)
    images = []
    for plane, panel_axes in zip(planes, axes[::-1], strict=True):
        images.append(
            panel_axes.imshow(
                np.ma.masked_invalid(plane),
                origin="lower",
                extent=style.extent_um(grid),
                cmap=style.AMOUNTS,
                vmin=low,
                vmax=high,
                interpolation="nearest",
            )
        )
        panel_axes.set_xticks([])
        panel_axes.set_yticks([])
        panel_axes.spines[:].set_visible(False)
    axes[0].set_title(name)
    bar = figure.colorbar(images[0], ax=list(axes), location="bottom", label=unit, aspect=14)
    bar.outline.set_visible(False)
    bar.ax.locator_params(nbins=3)
