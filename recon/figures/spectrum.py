"""The spectrum of one voxel: truth, reconstructions and their error bands."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style
from recon.grid import Grid

FloatArray = NDArray[np.floating]


def spectrum(
    shift_ppm: FloatArray,
    curves: Mapping[str, FloatArray],
    *,
    unit: str,
    truth: FloatArray | None = None,
    errors: Mapping[str, FloatArray] | None = None,
    lines: Mapping[str, float] | None = None,
    grid: Grid | None = None,
    voxel: tuple[int, int, int] | None = None,
) -> Figure:
    """One voxel's spectrum, chemical shift falling from left to right.

    Parameters
    ----------
    shift_ppm
        Chemical shift of each sample (F,), in either order.
    curves
        Reconstructed real spectra by name, (F,).
    truth
        The true spectrum (F,).
    errors
        One standard deviation of some of the curves (F,) or one number, drawn as a band of ± it.
    lines
        Shifts in ppm to mark above the spectrum, by name.
    grid, voxel
        Where the voxel (z, y, x) lies, for the title.

    Raises
    ------
    InputError
        Nothing to draw, a complex curve, lengths that differ, a band without its curve.
    """
    shift = np.asarray(shift_ppm)
    errors = errors or {}
    drawn = ({} if truth is None else {"truth": truth}) | dict(curves)
    _check(shift, drawn, errors)
    with style.applied():
        figure = style.new_figure(style.PAGE_WIDTH, 3.5)
        axes = figure.subplots()
        if truth is not None:
            axes.plot(shift, truth, color=style.TRUTH, linewidth=1.0, label="truth", zorder=4)
        for number, (name, curve) in enumerate(curves.items()):
            _curve(axes, shift, name, np.asarray(curve), errors.get(name), number)
        axes.set_xlim(shift.max(), shift.min())
        axes.set_xlabel("chemical shift (ppm)")
        axes.set_ylabel(f"spectrum ({unit})")
        axes.axhline(0, color=style.FAINT, linewidth=0.6, zorder=0)
        if lines:
            _mark_lines(axes, lines)
        figure.legend(loc="outside lower center", ncols=min(4, len(drawn)))
        if grid is not None and voxel is not None:
            axes.set_title(voxel_title(grid, voxel), loc="left", pad=22 if lines else 6)
    return figure


def _curve(
    axes: Axes,
    shift: FloatArray,
    name: str,
    curve: FloatArray,
    error: FloatArray | float | None,
    number: int,
) -> None:
    colour = style.LINES[number % len(style.LINES)]
    dash = style.DASHES[number % len(style.DASHES)]
    label = name if error is None else f"{name} ± 1 sd"
    axes.plot(shift, curve, color=colour, linestyle=dash, label=label, zorder=3)
    if error is not None:
        low, high = curve - error, curve + error
        axes.fill_between(shift, low, high, color=colour, alpha=0.25, linewidth=0, zorder=2)


def _mark_lines(axes: Axes, lines: Mapping[str, float]) -> None:
    """Names above the frame, on two levels where neighbours are close."""
    left, right = axes.get_xlim()
    ranked = sorted(lines.items(), key=lambda item: -item[1])
    previous, raised = np.inf, False
    for name, at in ranked:
        if not right <= at <= left:
            continue
        raised = not raised and previous - at < 0.13 * (left - right)
        previous = at
        axes.axvline(at, color=style.FAINT, linewidth=0.6, linestyle=(0, (1, 2)), zorder=0)
        axes.annotate(
            name,
            (at, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(0, 13 if raised else 2),
            textcoords="offset points",
            ha="center",
            va="bottom",
            fontsize=9,
            color="#505050",
        )


def voxel_title(grid: Grid, voxel: tuple[int, int, int]) -> str:
    """Where a voxel (z, y, x) lies."""
    level, row, column = voxel
    height = style.micrometres(grid.heights[level])
    return (
        f"voxel at x = {style.micrometres(grid.x[column])}, "
        f"y = {style.micrometres(grid.y[row])}, z = {height}"
    )


def _check(
    shift: FloatArray, drawn: Mapping[str, FloatArray], errors: Mapping[str, FloatArray]
) -> None:
    if not drawn or shift.ndim != 1 or shift.size < 2:
        raise InputError("there is no spectrum to draw", "figure")
    for name, curve in drawn.items():
        if np.iscomplexobj(curve) or np.shape(curve) != shift.shape:
            raise InputError(
                f"'{name}' has shape {np.shape(curve)} and type {np.asarray(curve).dtype}",
                "figure",
                f"give a real spectrum of {shift.size} samples",
            )
    for name in errors:
        if name not in drawn:
            raise InputError(f"the error band '{name}' belongs to no curve", "figure")
