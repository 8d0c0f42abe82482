"""Which voxels of each map can be read, and why not, plane by plane."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style
from recon.grid import Grid
from recon.labels import Labels, Readability

MOST_COLUMNS = 5

COLOURS = {
    Readability.QUANTIFIABLE: "#0072B2",
    Readability.DETECTED: "#8CC5E3",
    Readability.BELOW_DETECTION: "#EDEDED",
    Readability.UNKNOWN_ERROR: "#BDBDBD",
    Readability.NOT_FINITE: "#8a8a8a",
    Readability.NO_INFORMATION: "#5a5a5a",
    Readability.POOR_FIT: "#D55E00",
    Readability.NUISANCE_AT_BOUND: "#E69F00",
}
SHORT = {
    Readability.QUANTIFIABLE: "quantifiable",
    Readability.DETECTED: "detected",
    Readability.BELOW_DETECTION: "below detection",
    Readability.UNKNOWN_ERROR: "no standard error",
    Readability.NOT_FINITE: "no value",
    Readability.NO_INFORMATION: "no information",
    Readability.POOR_FIT: "poor fit",
    Readability.NUISANCE_AT_BOUND: "shift or width at its bound",
}
BLENDS = ("#CC79A7", "#009E73", "#A65A86", "#00694d")


def label_maps(labels: Labels, names: Sequence[str], grid: Grid) -> Figure:
    """A row per species, a column per height (five at most, the ends among them).

    Raises
    ------
    InputError
        Labels that fit neither names nor grid.
    """
    if labels.values.shape != (len(names), *grid.shape):
        raise InputError(f"labels of shape {labels.values.shape}", "figure", "one map per species")
    columns = min(grid.shape[0], MOST_COLUMNS)
    planes = np.linspace(0, grid.shape[0] - 1, columns).round().astype(int)
    kinds = np.unique(labels.values[:, planes])
    colours, told = zip(*(_look(int(kind), names) for kind in kinds), strict=True)
    left, right, bottom, top = style.extent_um(grid)
    panel = min(1.9, (style.PAGE_WIDTH - 0.6) / columns)
    height = len(names) * (panel * (top - bottom) / (right - left) + 0.08) + 0.5
    with style.applied():
        legend_rows = -(-len(kinds) // 3)
        width = max(columns * panel + 0.6, 5.4)
        figure = style.new_figure(width, height + 0.24 * legend_rows)
        axes: NDArray[Any] = figure.subplots(len(names), columns, squeeze=False)
        norm = BoundaryNorm(np.arange(len(kinds) + 1) - 0.5, len(kinds))
        for row, name in enumerate(names):
            for column, level in enumerate(planes):
                panel_axes = axes[row, column]
                panel_axes.imshow(
                    np.searchsorted(kinds, labels.values[row, level]),
                    origin="lower",
                    extent=style.extent_um(grid),
                    cmap=ListedColormap(colours),
                    norm=norm,
                    interpolation="nearest",
                )
                panel_axes.set_xticks([])
                panel_axes.set_yticks([])
                panel_axes.spines[:].set_visible(False)
                if row == 0:
                    panel_axes.set_title(style.micrometres(grid.heights[level]))
            axes[row, 0].set_ylabel(name)
        style.scale_bar(axes[-1, 0])
        patches = [
            Patch(facecolor=colour, edgecolor=style.FAINT, linewidth=0.5, label=text)
            for colour, text in zip(colours, told, strict=True)
        ]
        figure.legend(handles=patches, loc="outside lower center", ncols=min(3, len(kinds)))
    return figure


def _look(kind: int, names: Sequence[str]) -> tuple[str, str]:
    """Colour and short text of a label."""
    blended = kind - Readability.BLENDED
    if 0 <= blended < len(names):
        return BLENDS[blended % len(BLENDS)], f"blended with {names[blended]}"
    if kind not in {int(one) for one in COLOURS}:
        return style.FAINT, f"label {kind}"
    return COLOURS[Readability(kind)], SHORT[Readability(kind)]
