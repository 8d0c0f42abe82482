"""A table of detection limits over two numbers, as a picture with its figures in it."""

from __future__ import annotations

import numpy as np
from matplotlib.colors import LogNorm
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style

FloatArray = NDArray[np.floating]


def sweep(
    values: FloatArray,
    rows: tuple[str, tuple[float, ...]],
    columns: tuple[str, tuple[float, ...]],
    *,
    quantity: str,
    unit: str,
) -> Figure:
    """Positive values (rows, columns); `rows` and `columns` are a name with its numbers.

    Raises
    ------
    InputError
        A shape that does not fit, or values that are not positive.
    """
    shape = (len(rows[1]), len(columns[1]))
    if np.shape(values) != shape or not (np.isfinite(values).all() and np.min(values) > 0):
        raise InputError(
            f"a table of shape {np.shape(values)}", "figure", f"give {shape}, positive"
        )
    low, high = float(np.min(values)), float(np.max(values))
    with style.applied():
        width = min(style.PAGE_WIDTH, 2.2 + 0.85 * shape[1])
        figure = style.new_figure(width, 1.3 + 0.42 * shape[0])
        axes = figure.subplots()
        norm = LogNorm(low, high if high > low else 1.01 * low)
        image = axes.imshow(values, cmap=style.AMOUNTS, norm=norm, aspect="auto")
        for row in range(shape[0]):
            for column in range(shape[1]):
                dark = norm(values[row, column]) < 0.5
                axes.text(
                    column,
                    row,
                    f"{values[row, column]:.3g}",
                    ha="center",
                    va="center",
                    color="white" if dark else "black",
                )
        axes.set_xticks(range(shape[1]), [f"{v:g}" for v in columns[1]])
        axes.set_yticks(range(shape[0]), [f"{v:g}" for v in rows[1]])
        axes.set_xlabel(columns[0])
        axes.set_ylabel(rows[0])
        axes.tick_params(length=0)
        axes.spines[:].set_visible(False)
        axes.set_title(quantity, loc="left")
        bar = figure.colorbar(image, label=unit, aspect=12)
        bar.outline.set_visible(False)
    return figure
