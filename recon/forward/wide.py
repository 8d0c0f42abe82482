"""A specimen wider than the camera's view: a wider grid of which the channels see a part.

The object is solved for on the wide grid, where the FFT's wrap happens out of sight; the field is
computed for the pixels of a camera that spans it and cropped to the channels there are. Gradient
phases stay zero at the first voxel of the view.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.grid import Grid
from recon.instrument import Instrument, OneDetector

ComplexArray = NDArray[np.complexfloating]


@dataclass(frozen=True)
class Window:
    """Where the channels lie among the pixels that would span the object's grid.

    Attributes
    ----------
    binning
        Voxels per pixel along (y, x).
    pixels
        Pixels that span the object's grid, (y, x).
    first
        First pixel that exists.
    channels
        Number of pixels that exist, (y, x).
    """

    binning: tuple[int, int]
    pixels: tuple[int, int]
    first: tuple[int, int]
    channels: tuple[int, int]

    @classmethod
    def of(cls, grid: Grid, instrument: Instrument, margin: tuple[int, int]) -> Window:
        """Put the view into the grid, `margin` voxels (y, x) from its first voxel.

        Raises
        ------
        InputError
            A pixel is no whole number of voxels, margin or grid no whole number of pixels, or the
            view reaches beyond the grid.
        """
        counts = grid.shape[1:]
        if isinstance(instrument.detector, OneDetector):
            _check_inside(grid, instrument, margin)
            return cls((counts[0], counts[1]), (1, 1), (0, 0), (1, 1))
        ratio = instrument.pixel / np.array(grid.voxel[1:])
        binning = np.rint(ratio).astype(int)
        if not (np.allclose(ratio, binning, rtol=1e-6) and binning.min() >= 1):
            raise InputError(
                f"a camera pixel spans {ratio[1]:g} x {ratio[0]:g} voxels",
                "camera.pixel_um",
                "choose voxels that divide the pixel",
            )
        if (np.array(counts) % binning).any() or (np.array(margin) % binning).any():
            raise InputError(
                f"grid {counts[::-1]} or margin {margin[::-1]} voxels is no whole number of pixels",
                "grid",
                "widen it by whole pixels",
            )
        _check_inside(grid, instrument, margin)
        pixels, first = np.array(counts) // binning, np.array(margin) // binning
        return cls(_pair(binning), _pair(pixels), _pair(first), instrument.detector.channels())

    @property
    def whole(self) -> bool:
        """Every pixel of the grid exists."""
        return self.channels == self.pixels

    def crop(self, planes: ComplexArray) -> ComplexArray:
        """(…, pixels) to (…, channels), a view."""
        (y, x), (cy, cx) = self.first, self.channels
        return planes[..., y : y + cy, x : x + cx]

    def fill(self, planes: ComplexArray) -> ComplexArray:
        """The adjoint of `crop`: zeros for pixels that do not exist."""
        if self.whole:
            return planes
        filled = np.zeros((*planes.shape[:-2], *self.pixels), planes.dtype)
        self.crop(filled)[...] = planes
        return filled


def widened(grid: Grid, margin: tuple[int, int]) -> Grid:
    """The grid with `margin` voxels (y, x) more on each side.

    Positions in it are `margin` voxels less than in the wider one.
    """
    if min(margin) < 0:
        raise InputError(f"margin {margin} must not be negative", "grid")
    nz, ny, nx = grid.shape
    return replace(grid, shape=(nz, ny + 2 * margin[0], nx + 2 * margin[1]))


def _check_inside(grid: Grid, instrument: Instrument, margin: tuple[int, int]) -> None:
    voxel = np.array(grid.voxel[1:])
    room = (np.array(grid.shape[1:]) - np.array(margin)) * voxel
    if min(margin) < 0 or (np.asarray(instrument.view) > room * (1 + 1e-6)).any():
        extent = np.array(grid.shape[1:]) * voxel * 1e6
        raise InputError(
            f"the view does not fit into the grid of {extent[1]:g} x {extent[0]:g} µm at a margin "
            f"of {margin[1]} x {margin[0]} voxels",
            "grid",
            "widen it or change the margin",
        )


def _pair(values: NDArray[np.integer]) -> tuple[int, int]:
    return int(values[0]), int(values[1])
