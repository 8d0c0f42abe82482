"""Maps over the camera's channels, each with its own scale; channels that are not used are grey."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon.errors import InputError
from recon.figures import style

FloatArray = NDArray[np.floating]


def channel_maps(
    maps: Mapping[str, FloatArray], used: NDArray[np.bool_], view_um: tuple[float, float]
) -> Figure:
    """Maps (channels y, channels x) side by side; the key is name and unit.

    Parameters
    ----------
    used
        Channels that are used.
    view_um
        Extent of the view (y, x), µm.
    """
    if not maps or any(one.shape != used.shape for one in maps.values()):
        raise InputError("maps and channels differ in shape", "figure")
    height, width = view_um
    with style.applied():
        side = (style.PAGE_WIDTH - 0.4) / len(maps)
        figure = style.new_figure(style.PAGE_WIDTH, min(side, 2.6) * height / width + 0.75)
        panels: NDArray[Any] = figure.subplots(1, len(maps), squeeze=False)[0]
        for axes, (name, values) in zip(panels, maps.items(), strict=True):
            inside = values[used]
            low, high = np.percentile(inside, (0.5, 99.5))
            colours = style.AMOUNTS.copy()
            colours.set_bad(style.MISSING)
            image = axes.imshow(
                np.ma.masked_where(~used, values),
                origin="lower",
                extent=(0, width, 0, height),
                cmap=colours,
                vmin=low,
                vmax=high if high > low else low + abs(low) * 1e-3 + 1e-30,
                interpolation="nearest",
            )
            axes.set_xticks([])
            axes.set_yticks([])
            axes.spines[:].set_visible(False)
            bar = figure.colorbar(image, ax=axes, location="bottom", label=name, aspect=16)
            bar.outline.set_visible(False)
            bar.ax.locator_params(nbins=3)
        style.scale_bar(panels[0])
    return figure
