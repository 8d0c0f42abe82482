"""Where the shots of a protocol lie in the space of nuclear and sensor wavevectors."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style
from recon.grid import Grid

FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]

PER_MICRON = 1e-6
"""From rad/m to rad/µm."""


def coverage(
    nuclear_wavevector: FloatArray,
    sensor_wavevector: FloatArray,
    sensing_axis: IntArray,
    grid: Grid,
    averages: IntArray | None = None,
) -> Figure:
    """Every shot as a point: nuclear k (x, y), k (x, z) if used, and sensor q (x, y) if used.

    Parameters
    ----------
    nuclear_wavevector, sensor_wavevector
        k (J, 3) and q (J, 2), rad/m, along (x, y, z) and (x, y).
    sensing_axis
        1 to 4, (J,): the colour and shape of the points.
    grid
        Its band (± Nyquist) is drawn as a box.
    averages
        (J,): the points' areas, summed where shots coincide.

    Raises
    ------
    InputError
        No shot, or tables of different lengths.
    """
    k, q = np.asarray(nuclear_wavevector), np.asarray(sensor_wavevector)
    axis = np.asarray(sensing_axis)
    count = np.ones(len(k)) if averages is None else np.asarray(averages, float)
    if not len(k) or k.shape != (len(k), 3) or q.shape != (len(k), 2) or axis.shape != count.shape:
        raise InputError("the tables of shots are empty or differ in length", "figure")
    panels = [("nuclear k", k[:, :2], ("x", "y"))]
    if np.any(k[:, 2]):
        panels.append(("nuclear k, along depth", k[:, [0, 2]], ("x", "z")))
    if np.any(q):
        panels.append(("sensor q", q, ("x", "y")))
    with style.applied():
        width = min(style.PAGE_WIDTH, 0.6 + 3.0 * len(panels))
        figure = style.new_figure(width, (width - 0.6) / len(panels) + 0.75)
        axes: NDArray[Any] = figure.subplots(1, len(panels), squeeze=False)[0]
        for panel, (title, vectors, names) in zip(axes, panels, strict=True):
            _points(panel, vectors * PER_MICRON, axis, count)
            _frame(panel, title, names, grid)
        handles, labels = axes[0].get_legend_handles_labels()
        figure.legend(
            handles,
            labels,
            loc="outside lower center",
            ncols=min(2 * len(panels), len(labels)),
            handletextpad=0.1,
            markerscale=1.5,
        )
    return figure


def _points(axes: Axes, vectors: FloatArray, axis: IntArray, count: FloatArray) -> None:
    """Coinciding shots become one larger point."""
    largest = 1.0
    gathered = []
    for number in np.unique(axis):
        here = axis == number
        places, which = np.unique(np.round(vectors[here], 9), axis=0, return_inverse=True)
        shots = np.bincount(which.ravel(), count[here])
        gathered.append((int(number), places, shots))
        largest = max(largest, float(shots.max()))
    for number, places, shots in gathered:
        index = (number - 1) % len(style.LINES)
        axes.scatter(
            places[:, 0],
            places[:, 1],
            s=7 + 60 * (shots - 1) / max(largest - 1, 10),
            marker=style.MARKERS[index % len(style.MARKERS)],
            color=style.LINES[index],
            alpha=0.75,
            linewidths=0,
            label=f"sensing axis {number}",
        )


def _frame(axes: Axes, title: str, names: tuple[str, str], grid: Grid) -> None:
    symbol = title.split()[1][0]
    dz, dy, dx = grid.voxel
    edges = {"x": dx, "y": dy, "z": dz}
    half = [np.pi / edges[name] * PER_MICRON for name in names]
    box = Rectangle(
        (-half[0], -half[1]), 2 * half[0], 2 * half[1], fill=False, edgecolor=style.FAINT,
        linewidth=0.8, linestyle=(0, (4, 2)),
    )  # fmt: skip
    axes.add_patch(box)
    axes.autoscale_view()
    reach = [
        max(1.08 * half[i], *(1.05 * np.abs(lim)))
        for i, lim in enumerate((axes.get_xlim(), axes.get_ylim()))
    ]
    axes.set_xlim(-reach[0], reach[0])
    axes.set_ylim(-reach[1], reach[1])
    axes.set_aspect("equal" if names == ("x", "y") else "auto")
    axes.set_box_aspect(1)
    axes.set_title(title)
    axes.set_xlabel(f"${symbol}_{names[0]}$ (rad/µm)")
    axes.set_ylabel(f"${symbol}_{names[1]}$ (rad/µm)")
