"""An accompanying micrograph on the grid of a result."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.grid import Grid
from recon.specimens.from_image import overlap
from recon.specimens.image_file import read_image


def on_grid(path: Path | str, grid: Grid, pixel_um: float | None = None) -> NDArray[np.float32]:
    """Area means of a picture, centred on the grid and repeated over its planes, (nz, ny, nx).

    Voxels that the picture does not reach are NaN.

    Raises
    ------
    InputError
        The picture cannot be read, is a stack, or has no pixel size.
    """
    image = read_image(path)
    if len(image.levels) > 1:
        raise InputError("is a stack of slices", str(path), "give one picture")
    if pixel_um is None and image.pixel is None:
        raise InputError("the image has no pixel size", str(path), "give --pixel-um")
    if pixel_um is not None and not pixel_um > 0:
        raise InputError(f"pixel size {pixel_um:g} um must be positive", str(path))
    edges = image.pixel[1:] if pixel_um is None and image.pixel else (pixel_um or 0.0,) * 2
    scale = 1.0 if pixel_um is None else 1e-6
    sides = []
    for axis in range(2):
        count, edge = grid.shape[1 + axis], grid.voxel[1 + axis]
        pixels, pixel = image.levels.shape[1 + axis], edges[axis] * scale
        first = (pixels * pixel - count * edge) / 2
        sides.append(overlap(first, edge, count, pixel, pixels))
    rows, columns = sides
    level = np.asarray(image.levels[0], np.float32)
    total = (rows @ level) @ columns.T
    covered = (rows @ np.ones_like(level)) @ columns.T
    with np.errstate(invalid="ignore", divide="ignore"):
        plane = np.where(covered > 0.5, total / covered, np.nan).astype(np.float32)
    return np.broadcast_to(plane, grid.shape).copy()
