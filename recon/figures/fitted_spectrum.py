"""One voxel's spectrum with its fit, the species it is made of, the residual and the error band."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style
from recon.figures.spectrum import voxel_title
from recon.grid import Grid

FloatArray = NDArray[np.floating]


def fitted_spectrum(
    shift_ppm: FloatArray,
    measured: FloatArray,
    fit: FloatArray,
    error: FloatArray | float,
    *,
    unit: str,
    parts: Mapping[str, FloatArray] | None = None,
    limits_ppm: tuple[float, float] | None = None,
    grid: Grid | None = None,
    voxel: tuple[int, int, int] | None = None,
) -> Figure:
    """Above: spectrum ± 1 standard error, fit, and each species' share. Below: the residual.

    Parameters
    ----------
    shift_ppm, measured, fit
        (F,), real.
    error
        Standard error of the measured spectrum, (F,) or one number.
    parts
        What each species adds to the fit, (F,), by name with whatever is to be said of it.
    limits_ppm
        Lowest and highest shift to show.
    grid, voxel
        Where the voxel (z, y, x) lies, for the title.

    Raises
    ------
    InputError
        Curves that are complex or of another length.
    """
    shift, parts = np.asarray(shift_ppm), dict(parts or {})
    _check(shift, {"measured": measured, "fit": fit, **parts})
    band = np.broadcast_to(np.asarray(error, float), shift.shape)
    with style.applied():
        figure = style.new_figure(style.PAGE_WIDTH, 4.4)
        upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=(3.2, 1))
        _bands(upper, shift, measured, band)
        upper.plot(shift, measured, color=style.INK, linewidth=1.1, label="spectrum ± 1 s.e.")
        upper.plot(shift, fit, color=style.LINES[1], dashes=(4, 1.5), label="fit")
        for number, (name, curve) in enumerate(parts.items()):
            colour = (style.LINES[0], *style.LINES[2:])[number % 5]
            upper.plot(shift, curve, color=colour, linewidth=1.1, alpha=0.9, label=name)
        upper.set_ylabel(f"spectrum ({unit})")
        _bands(lower, shift, np.zeros_like(shift), 2 * band, 0.12)
        _bands(lower, shift, np.zeros_like(shift), band)
        lower.plot(shift, measured - fit, color=style.INK, linewidth=1.0)
        lower.set_ylabel("residual")
        lower.set_xlabel("chemical shift (ppm); bands ± 1 and ± 2 standard errors")
        for axes in (upper, lower):
            axes.axhline(0, color=style.FAINT, linewidth=0.6, zorder=0)
        low, high = limits_ppm or (float(shift.min()), float(shift.max()))
        lower.set_xlim(high, low)
        figure.align_ylabels()
        if grid is not None and voxel is not None:
            upper.set_title(voxel_title(grid, voxel), loc="left")
        figure.legend(loc="outside lower center", ncols=min(3, 2 + len(parts)))
    return figure


def _bands(
    axes: Axes, shift: FloatArray, centre: FloatArray, width: FloatArray, alpha: float = 0.25
) -> None:
    low, high = centre - width, centre + width
    axes.fill_between(shift, low, high, color=style.FAINT, alpha=alpha, linewidth=0, zorder=1)


def _check(shift: FloatArray, drawn: Mapping[str, FloatArray]) -> None:
    for name, curve in drawn.items():
        if np.iscomplexobj(curve) or np.shape(curve) != shift.shape or shift.size < 2:
            raise InputError(
                f"'{name}' has shape {np.shape(curve)} and type {np.asarray(curve).dtype}",
                "figure",
                f"give a real spectrum of {shift.size} samples",
            )
