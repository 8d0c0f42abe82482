"""A specimen from any image: a real micrograph, a label image or a volume.

Every pixel's level becomes concentrations through a table (`recon.specimens.level_table`); then
each sub-voxel of the grid takes the area-weighted mean of the pixels it covers, so that amounts
are kept at any ratio of pixel to voxel. From stain to chemistry is an assumption, and the notes
of the specimen say so.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from recon.errors import InputError
from recon.grid import Grid
from recon.specimen import Specimen
from recon.specimens.image_file import LevelImage, read_image
from recon.specimens.level_table import LevelTable

FloatArray = NDArray[np.floating]
Float32Array = NDArray[np.float32]

ASSUMPTION = (
    "The step from image level to concentration is an assumption, not a measurement: a stain or "
    "contrast does not state the chemistry of what it marks."
)


@dataclass(frozen=True)
class Centred:
    """The image's centre on the grid's centre; a stack's lowest face at `bottom_um`."""

    bottom_um: float = 0.0


@dataclass(frozen=True)
class Corner:
    """The image point `x_um` right and `y_um` down from its first corner lies on the grid's corner.

    The grid's corner is the outer corner of voxel [:, 0, 0].
    """

    x_um: float = 0.0
    y_um: float = 0.0
    bottom_um: float = 0.0


@dataclass(frozen=True)
class Slab:
    """A single picture fills the whole depth unchanged."""

    def scale(self, share: float) -> float:
        """Factor on all contents at a share 0..1 of the grid's height."""
        return 1.0

    def shift(self, rise: float) -> tuple[float, float]:
        """Lateral shift (x, y) at a height above the middle, metres."""
        return 0.0, 0.0

    @property
    def remark(self) -> str:
        """What is assumed."""
        return "The single picture is taken to fill the whole depth unchanged (assumed)."


@dataclass(frozen=True)
class LeaningSlab(Slab):
    """Structures lean: the picture shifts by `lean_x`, `lean_y` µm per µm of height."""

    lean_x: float = 0.0
    lean_y: float = 0.0

    def shift(self, rise: float) -> tuple[float, float]:
        """Lateral shift (x, y) at a height above the middle, metres."""
        return self.lean_x * rise, self.lean_y * rise

    @property
    def remark(self) -> str:
        """What is assumed."""
        return (
            f"The single picture fills the whole depth and leans by {self.lean_x:g} (x) and "
            f"{self.lean_y:g} (y) µm per µm of height (assumed)."
        )


@dataclass(frozen=True)
class FadingSlab(Slab):
    """Contents change along a straight line from `bottom` to `top` times the picture's."""

    bottom: float = 1.0
    top: float = 0.5

    def scale(self, share: float) -> float:
        """Factor on all contents at a share 0..1 of the grid's height."""
        return self.bottom + (self.top - self.bottom) * share

    @property
    def remark(self) -> str:
        """What is assumed."""
        return (
            f"The single picture fills the whole depth, its contents going from {self.bottom:g} "
            f"to {self.top:g} times the table's (assumed)."
        )


def specimen_from_image(
    path: Path | str,
    table: LevelTable,
    grid: Grid,
    *,
    pixel_um: float | tuple[float, ...] | None = None,
    refinement: tuple[int, int, int] = (1, 1, 1),
    placement: Centred | Corner | None = None,
    depth: Slab | None = None,
) -> Specimen:
    """Make a specimen from an image of known pixel size.

    Parameters
    ----------
    path
        PNG (or another picture), TIFF or TIFF stack, NIfTI.
    table
        What each level is taken to hold.
    grid, refinement
        Where the maps are wanted: the grid split by (rz, ry, rx).
    pixel_um
        Pixel edge in µm, or (row, column), or (slice, row, column); NIfTI has it in its header.
        For a stack the first or the last form.
    placement
        Where the image lies; centred on the grid if not given. What it does not reach is empty.
    depth
        For a single picture: how it is assumed to go on in depth; unchanged if not given.

    Raises
    ------
    InputError
        No pixel size, an image that cannot be read or misses the grid, a label that the table
        does not list, or a depth assumption for a stack.
    """
    image = read_image(path)
    pixel = _pixel(pixel_um, image, str(path))
    placement = placement or Centred()
    if len(image.levels) > 1 and depth is not None:
        raise InputError("a stack has its own depth", str(path), "give no depth assumption")
    across = _Across(grid, refinement, image.levels.shape[1:], pixel[1:], placement)
    if len(image.levels) > 1:
        maps = _from_stack(image.levels, table, across, pixel[0], placement.bottom_um)
        remark = f"Stack of {len(image.levels)} slices, {pixel[0] * 1e6:.4g} µm apart."
    else:
        depth = depth or Slab()
        maps = _from_picture(image.levels[0], table, across, depth)
        remark = depth.remark
    if not maps.any() and table.levels.contents.any():
        raise InputError("the image puts nothing on the grid", str(path), "move or enlarge it")
    size = f"{pixel[1] * 1e6:.4g} × {pixel[2] * 1e6:.4g} µm"
    notes = (
        f"From the image {Path(path).name}, pixels of {size}. {image.remark}"
        f"{table.levels.remark(image.levels)} {remark} {ASSUMPTION} {table.notes}"
    )
    return Specimen(grid, table.species, maps, refinement, notes.strip())


def overlap(
    target_first: float, target_edge: float, targets: int, edge: float, pixels: int
) -> sparse.csr_matrix:
    """Share of each target cell covered by each pixel along one axis, (targets, pixels).

    Pixels start at 0 with width `edge`; targets start at `target_first` with width
    `target_edge`. Rows sum to 1 where the image covers the whole cell.
    """
    low = target_first + target_edge * np.arange(targets)[:, None]
    start = edge * np.arange(pixels)
    common = np.minimum(low + target_edge, start + edge) - np.maximum(low, start)
    share = np.maximum(common, 0) / target_edge
    share[share < 1e-6] = 0
    return sparse.csr_matrix(share.astype(np.float32))


@dataclass(frozen=True)
class _Across:
    """How pixels (rows, columns) of edges (y, x) metres map onto the grid's fine lattice."""

    grid: Grid
    refinement: tuple[int, int, int]
    shape: tuple[int, ...]
    pixel: tuple[float, float]
    placement: Centred | Corner

    @property
    def fine(self) -> Grid:
        return self.grid.refined(self.refinement)

    def matrices(self, shift: tuple[float, float]) -> tuple[Any, Any]:
        """Overlap matrices along rows and columns for an image moved by (x, y) metres."""
        found = []
        for axis in (0, 1):
            count, edge = self.fine.shape[1 + axis], self.fine.voxel[1 + axis]
            if isinstance(self.placement, Corner):
                first = 1e-6 * (self.placement.y_um, self.placement.x_um)[axis]
            else:
                first = (self.shape[axis] * self.pixel[axis] - count * edge) / 2
            first -= shift[1 - axis]
            found.append(overlap(first, edge, count, self.pixel[axis], self.shape[axis]))
        return found[0], found[1]


def _from_picture(
    levels: NDArray[Any], table: LevelTable, across: _Across, depth: Slab
) -> Float32Array:
    nz, ny, nx = across.fine.shape
    maps = np.empty((len(table.species), nz, ny, nx), np.float32)
    amounts = [table.levels.amounts(levels, index) for index in range(len(table.species))]
    shares = (np.arange(nz) + 0.5) / nz
    thickness = nz * across.fine.voxel[0]
    previous: tuple[float, float] | None = None
    for level, share in enumerate(shares):
        shift = depth.shift((share - 0.5) * thickness)
        if shift != previous:
            rows, columns = across.matrices(shift)
            planes = np.stack([(rows @ one) @ columns.T for one in amounts])
            previous = shift
        maps[:, level] = planes * np.float32(depth.scale(float(share)))
    return maps


def _from_stack(
    levels: NDArray[Any], table: LevelTable, across: _Across, spacing: float, bottom_um: float
) -> Float32Array:
    fine = across.fine
    rows, columns = across.matrices((0.0, 0.0))
    first = across.grid.base_height - bottom_um * 1e-6
    along = overlap(first, fine.voxel[0], fine.shape[0], spacing, len(levels))
    maps = np.empty((len(table.species), *fine.shape), np.float32)
    for index in range(len(table.species)):
        slices = [(rows @ table.levels.amounts(one, index)) @ columns.T for one in levels]
        stacked = np.stack(slices).reshape(len(levels), -1)
        maps[index] = (along @ stacked).reshape(fine.shape)
    return maps


def _pixel(
    stated: float | tuple[float, ...] | None, image: LevelImage, where: str
) -> tuple[float, float, float]:
    """Spacing (slice, row, column) in metres."""
    if stated is None:
        if image.pixel is None:
            raise InputError("the image has no pixel size", where, "give pixel_um")
        sizes = image.pixel
    else:
        listed = tuple(stated) if isinstance(stated, tuple | list) else (stated,) * 3
        if len(listed) == 2 and len(image.levels) > 1:
            raise InputError("a stack needs its slice spacing", where, "give three in pixel_um")
        if len(listed) not in (2, 3):
            raise InputError(f"pixel_um has {len(listed)} numbers", where, "give 1, 2 or 3")
        dz, dy, dx = (1e-6 * float(edge) for edge in (listed[-2], *listed)[-3:])
        sizes = (dz, dy, dx)
    if not (np.isfinite(sizes).all() and min(sizes) > 0):
        raise InputError(f"pixel size {sizes} m must be positive", where, "give pixel_um")
    return sizes
