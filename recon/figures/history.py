"""How a solver went: the objective's gap and the data residual against iterations or seconds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import LogFormatter
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style

FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Progress:
    """One solver's course.

    objective: (N,) after each iteration; residual: (N,) data residual in units of the noise σ, or
    None; seconds: (N,) since the start, or None.
    """

    objective: FloatArray
    residual: FloatArray | None = None
    seconds: FloatArray | None = None


def history(runs: Mapping[str, Progress], *, least: float | None = None) -> Figure:
    """Relative gap (F − F*)/F* of the objective, and the data residual where it is known.

    `least` is F*, the least objective; without it, the lowest value of all runs stands for it.
    The abscissa is seconds if every run has them (logarithmic where one run is over ten times as
    long as another), else iterations.

    Raises
    ------
    InputError
        No run, an empty one, or lengths that differ.
    """
    _check(runs)
    lowest = min(float(np.nanmin(run.objective)) for run in runs.values())
    best = lowest if least is None else least
    timed = all(run.seconds is not None for run in runs.values())
    with_residual = any(run.residual is not None for run in runs.values())
    with style.applied():
        figure = style.new_figure(style.PAGE_WIDTH, 3.1)
        panels: NDArray[Any] = figure.subplots(1, 1 + with_residual, squeeze=False)[0]
        for number, (name, run) in enumerate(runs.items()):
            at = _abscissa(run, timed)
            gap = (np.asarray(run.objective) - best) / max(abs(best), np.finfo(float).tiny)
            _line(panels[0], at, np.where(gap > 0, gap, np.nan), name, number)
            if run.residual is not None:
                _line(panels[1], at, run.residual, name, number)
        panels[0].set_yscale("log")
        panels[0].set_ylabel("relative gap of the objective")
        if with_residual:
            panels[1].axhline(1, color=style.FAINT, linewidth=0.8, linestyle=(0, (1, 2)))
            panels[1].set_yscale("log")
            panels[1].yaxis.set_major_formatter("{x:g}")
            panels[1].yaxis.set_minor_formatter(LogFormatter(minor_thresholds=(1.2, 0.6)))
            panels[1].set_ylabel("data residual (noise σ)")
        for panel in panels:
            panel.set_xlabel("time (s)" if timed else "iteration")
            if timed and _far_apart(runs):
                panel.set_xscale("log")
        handles, labels = panels[0].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside upper center", ncols=min(4, len(labels)))
    return figure


def _line(axes: Axes, at: FloatArray, values: FloatArray, name: str, number: int) -> None:
    axes.plot(
        at,
        values,
        label=name,
        color=style.LINES[number % len(style.LINES)],
        linestyle=style.DASHES[number % len(style.DASHES)],
        marker=style.MARKERS[number % len(style.MARKERS)],
        markersize=3.5,
        markevery=max(1, len(values) // 12),
    )


def _abscissa(run: Progress, timed: bool) -> FloatArray:
    if timed and run.seconds is not None:
        return np.asarray(run.seconds)
    return np.arange(1, len(run.objective) + 1, dtype=float)


def _far_apart(runs: Mapping[str, Progress]) -> bool:
    """Whether the slowest run took over ten times as long as the quickest, all times positive."""
    times = [np.asarray(run.seconds) for run in runs.values()]
    ends = [float(time[-1]) for time in times]
    return min(float(time.min()) for time in times) > 0 and max(ends) > 10 * min(ends)


def _check(runs: Mapping[str, Progress]) -> None:
    if not runs:
        raise InputError("there is no history to draw", "figure")
    for name, run in runs.items():
        count = len(run.objective)
        parts = [part for part in (run.residual, run.seconds) if part is not None]
        if not count or any(len(part) != count for part in parts):
            raise InputError(f"the history of '{name}' is empty or has uneven lengths", "figure")
