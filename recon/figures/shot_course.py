"""How the shots went: frequency, phase and amplitude of every shot over the clock's time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style

FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Course:
    """One quantity over the shots.

    Attributes
    ----------
    name, unit
        What it is.
    values, errors
        Each shot's own, (shots,).
    smooth
        What is applied or fitted, (shots,), or None.
    """

    name: str
    unit: str
    values: FloatArray
    errors: FloatArray
    smooth: FloatArray | None = None


def shot_course(clock_time: FloatArray, courses: list[Course]) -> Figure:
    """Points with ± 1 standard error, and a line for what is applied; one panel per quantity.

    Raises
    ------
    InputError
        There is nothing to draw, or shapes differ.
    """
    if not courses:
        raise InputError("there is no course to draw", "figure")
    for one in courses:
        if one.values.shape != clock_time.shape or one.errors.shape != clock_time.shape:
            raise InputError(f"'{one.name}' and the clock differ in length", "figure")
    order = np.argsort(clock_time)
    time, unit = clock_time[order] - clock_time.min(), "s"
    if time[-1] > 7200:
        time, unit = time / 3600, "h"
    with style.applied():
        figure = style.new_figure(style.PAGE_WIDTH, 0.7 + 1.6 * len(courses))
        panels: NDArray[Any] = figure.subplots(len(courses), 1, sharex=True, squeeze=False)
        for axes, one in zip(panels[:, 0], courses, strict=True):
            axes.errorbar(
                time,
                one.values[order],
                one.errors[order],
                fmt="o",
                markersize=2.5,
                color=style.LINES[0],
                elinewidth=0.7,
                label="each shot ± 1 standard error",
            )
            if one.smooth is not None:
                axes.plot(time, one.smooth[order], color=style.LINES[1], label="applied", zorder=3)
            axes.set_ylabel(f"{one.name}\n({one.unit})")
        panels[0, 0].legend(loc="best", fontsize=8, frameon=False)
        panels[-1, 0].set_xlabel(f"clock time ({unit})")
        figure.align_ylabels(list(panels[:, 0]))
    return figure
