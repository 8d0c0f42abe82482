"""Maps at several depths: truth, reconstructions and their errors, or all species of a specimen."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.colors import Colormap
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style
from recon.grid import Grid

FloatArray = NDArray[np.floating]
Limits = tuple[float, float]


def comparison(
    columns: Mapping[str, FloatArray],
    grid: Grid,
    *,
    quantity: str,
    unit: str,
    truth: FloatArray | None = None,
    depths: Sequence[int] | None = None,
    limits: Limits | None = None,
    error_limit: float | None = None,
) -> Figure:
    """Truth and reconstructions side by side, then their errors; one row per depth.

    Parameters
    ----------
    columns
        Reconstructions by name, each (nz, ny, nx), real.
    truth
        The true map (nz, ny, nx); without it there are no errors.
    depths
        Slices to draw; by default up to three, evenly spread.
    limits, error_limit
        Ends of the one colour scale for all maps, and of the scale ± for all errors; by default
        from the truth (or from all maps) and from the errors, rounded.

    Raises
    ------
    InputError
        No map, a complex map, a map that does not fit the grid, or a slice that is not there.
    """
    shown = ({} if truth is None else {"truth": truth}) | dict(columns)
    chosen = checked(shown, grid, depths)
    errors = {} if truth is None else {name: one - truth for name, one in columns.items()}
    limits = limits or amount_limits([truth] if truth is not None else list(columns.values()))
    limit = error_limit or _error_limit(list(errors.values()), limits)
    with style.applied():
        figure, axes = _panels(len(chosen), (len(shown), len(errors)), grid)
        images = _fill(axes[:, : len(shown)], shown, grid, chosen, style.AMOUNTS, limits)
        _colour_bar(figure, images, axes[-1, : len(shown)], f"{quantity} ({unit})")
        if errors:
            right = axes[:, len(shown) :]
            wrong = _fill(right, errors, grid, chosen, style.ERRORS, (-limit, limit))
            _colour_bar(figure, wrong, right[-1], f"error ({unit})")
            for panel, (name, error) in zip(right[0], errors.items(), strict=True):
                spread = float(np.sqrt(np.nanmean(np.square(error))))
                panel.set_title(f"{name} − truth\nr.m.s. {spread:.2g} {unit}")
        _finish(axes, grid, chosen)
    return figure


def overview(
    maps: Mapping[str, FloatArray],
    grid: Grid,
    *,
    unit: str,
    depths: Sequence[int] | None = None,
) -> Figure:
    """All quantities of a specimen, one column each with its own scale, one row per depth.

    maps: by name, each (nz, ny, nx), real, all in the same unit. Errors: as `comparison`.
    """
    chosen = checked(maps, grid, depths)
    with style.applied():
        figure, axes = _panels(len(chosen), (len(maps), 0), grid)
        for column, (name, one) in enumerate(maps.items()):
            limits = amount_limits([one])
            panels = axes[:, column : column + 1]
            images = _fill(panels, {name: one}, grid, chosen, style.AMOUNTS, limits)
            _colour_bar(figure, images, panels[-1], unit)
        _finish(axes, grid, chosen)
    return figure


def checked(
    maps: Mapping[str, FloatArray], grid: Grid, depths: Sequence[int] | None
) -> Sequence[int]:
    """The planes to draw; maps that do not fit are refused."""
    if not maps:
        raise InputError("there is no map to draw", "figure")
    for name, one in maps.items():
        if np.iscomplexobj(one) or np.shape(one) != grid.shape:
            raise InputError(
                f"'{name}' has shape {np.shape(one)} and type {np.asarray(one).dtype}",
                "figure",
                f"give real maps of shape {grid.shape}",
            )
    if depths is None:
        slices, count = grid.shape[0], min(3, grid.shape[0])
        depths = [((2 * row + 1) * slices - 1) // (2 * count) for row in range(count)]
    beyond = [level for level in depths if not 0 <= level < grid.shape[0]]
    if beyond or not depths:
        raise InputError(f"slice {beyond or 'none'} of {grid.shape[0]} cannot be drawn", "figure")
    return depths


def amount_limits(maps: Sequence[FloatArray]) -> Limits:
    """From zero (or the least value) to just below the largest."""
    values = np.concatenate([np.ravel(one) for one in maps])
    values = values[np.isfinite(values)]
    if not values.size:
        return 0.0, 1.0
    low, high = float(min(values.min(), 0.0)), float(np.percentile(values, 99.8))
    return (low, high) if high > low else (low, low + 1.0)


def _error_limit(errors: Sequence[FloatArray], limits: Limits) -> float:
    """A round number that holds 99 % of all errors, never below 2 % of the maps' scale."""
    least = 0.02 * (limits[1] - limits[0])
    if not errors:
        return least
    sizes = np.abs(np.concatenate([np.ravel(one) for one in errors]))
    sizes = sizes[np.isfinite(sizes)]
    return max(least, _rounded_up(float(np.percentile(sizes, 99)))) if sizes.size else least


def _rounded_up(value: float) -> float:
    if value <= 0:
        return 0.0
    power = 10.0 ** np.floor(np.log10(value))
    return float(
        power * min(digit for digit in (1, 1.5, 2, 3, 4, 5, 7, 10) if digit * power >= value)
    )


def _panels(rows: int, groups: tuple[int, int], grid: Grid) -> tuple[Figure, NDArray[Any]]:
    """Rows of maps in one or two groups of columns, with room for colour bars below."""
    count = sum(groups)
    left, right, bottom, top = style.extent_um(grid)
    aspect = (top - bottom) / (right - left)
    panel = min(style.PANEL_LIMIT, (style.PAGE_WIDTH - 0.35) / count)
    figure = style.new_figure(panel * count + 0.35, rows * panel * aspect + 1.1)
    axes: NDArray[Any] = figure.subplots(rows, count, squeeze=False)
    return figure, axes


def _fill(
    axes: NDArray[Any],
    maps: Mapping[str, FloatArray],
    grid: Grid,
    depths: Sequence[int],
    colours: Colormap,
    limits: Limits,
) -> list[Any]:
    """Draw columns of maps on one colour scale; returns the images."""
    images = []
    for column, (name, one) in enumerate(maps.items()):
        axes[0, column].set_title(name)
        for row, level in enumerate(depths):
            panel = axes[row, column]
            images.append(
                panel.imshow(
                    np.ma.masked_invalid(one[level]),
                    origin="lower",
                    extent=style.extent_um(grid),
                    cmap=colours,
                    vmin=limits[0],
                    vmax=limits[1],
                    interpolation="nearest",
                )
            )
            panel.set_xticks([])
            panel.set_yticks([])
            panel.spines[:].set_visible(False)
    return images


def _finish(axes: NDArray[Any], grid: Grid, depths: Sequence[int]) -> None:
    """Heights at the left of the rows, one scale bar."""
    style.scale_bar(axes[0, 0])
    for panel, level in zip(axes[:, 0], depths, strict=True):
        panel.set_ylabel(f"z = {style.micrometres(grid.heights[level])}")


def _colour_bar(figure: Figure, images: list[Any], panels: NDArray[Any], label: str) -> None:
    """One bar below a group of columns; arrows where values leave the scale."""
    low = any(np.any(image.get_array() < image.norm.vmin) for image in images)
    high = any(np.any(image.get_array() > image.norm.vmax) for image in images)
    extend = {(False, False): "neither", (True, False): "min", (False, True): "max"}
    bar = figure.colorbar(
        images[0],
        ax=list(panels),
        location="bottom",
        extend=extend.get((low, high), "both"),
        label=label,
        fraction=0.05,
        aspect=18,
        shrink=0.9 if len(panels) == 1 else 0.7,
    )
    bar.outline.set_visible(False)
    bar.ax.locator_params(nbins=3 if len(panels) == 1 else 5)
