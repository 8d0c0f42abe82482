"""Reading an image as levels: PNG and its kin, TIFF and TIFF stacks, NIfTI.

Rows of the picture run along +y and columns along +x; slices of a stack run along +z, away from
the diamond. A NIfTI volume is first turned so that its axes run along +x, +y, +z of its own frame.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
import tifffile
from numpy.typing import NDArray
from PIL import Image

from recon.errors import InputError

LUMINANCE = (0.2126, 0.7152, 0.0722)
"""Weights of red, green and blue in luminance (Recommendation ITU-R BT.709)."""

METRES = {1: 1.0, 2: 1e-3, 3: 1e-6}
"""Length units of a NIfTI header: metre, millimetre, micrometre (nifti1.h)."""


@dataclass(frozen=True, eq=False)
class LevelImage:
    """Levels (slices, rows, columns), and what the file says of itself.

    pixel: (slice, row, column) spacing in metres from the file, or None.
    """

    levels: NDArray[Any]
    remark: str
    pixel: tuple[float, float, float] | None = None


def read_image(path: Path | str) -> LevelImage:
    """Read any grey, label or colour image.

    Colour becomes optical density, −log10((Y + 1)/(Y_max + 1)) with Y the luminance of the
    stored values, taken as proportional to light; 0 is white. An alpha channel is dropped.

    Raises
    ------
    InputError
        The file cannot be read, has an axis that is neither space nor colour, or holds values
        that are not finite.
    """
    path = Path(path)
    name = path.name.lower()
    reader: Callable[[Path], LevelImage] = _read_picture
    if name.endswith((".nii", ".nii.gz")):
        reader = _read_nifti
    elif name.endswith((".tif", ".tiff")):
        reader = _read_tiff
    try:
        image = reader(path)
    except InputError:
        raise
    except Exception as error:  # the readers raise many kinds for a damaged file
        reason = getattr(error, "strerror", None) or str(error) or type(error).__name__
        raise InputError(f"cannot be read as an image ({reason})", str(path)) from error
    if not np.isfinite(image.levels).all():
        raise InputError("has levels that are not finite", str(path))
    return image


def optical_density(colour: NDArray[Any]) -> NDArray[np.float32]:
    """Luminance optical density of red, green, blue in the last axis: 0 is white."""
    white = np.iinfo(colour.dtype).max if colour.dtype.kind == "u" else max(1.0, colour.max())
    luminance = colour[..., :3].astype(np.float32) @ np.array(LUMINANCE, np.float32)
    unit = 1.0 if colour.dtype.kind == "u" else white / 255
    ratio = (luminance + unit) / (white + unit)
    return np.maximum(-np.log10(ratio), 0).astype(np.float32)


def _read_picture(path: Path) -> LevelImage:
    with Image.open(path) as picture:
        if picture.mode == "P":
            return LevelImage(np.asarray(picture)[None], "Palette image: levels are its indices.")
        grey = picture.mode in ("1", "LA", "La")
        plain = picture.mode in ("L", "RGB", "F") or picture.mode.startswith("I")
        pixels = np.asarray(picture if plain else picture.convert("L" if grey else "RGB"))
    return _levels(pixels, is_colour=pixels.ndim == 3)


def _read_tiff(path: Path) -> LevelImage:
    with tifffile.TiffFile(path) as file:
        series = file.series[0]
        axes, pixels = series.axes, series.asarray()
    keep = [i for i, n in enumerate(pixels.shape) if n > 1 or axes[i] in "YXS"]
    axes, pixels = "".join(axes[i] for i in keep), pixels.reshape([pixels.shape[i] for i in keep])
    if axes == "SYX":
        axes, pixels = "YXS", np.moveaxis(pixels, 0, -1)
    is_colour = axes.endswith("S") and pixels.shape[-1] >= 3
    if axes.endswith("S") and not is_colour:
        axes, pixels = axes[:-1], pixels[..., 0]
    plane = axes.removesuffix("S")
    if not plane.endswith("YX") or plane[:-2] not in ("", "Z", "I", "Q"):
        raise InputError(
            f"has axes {axes}; only rows, columns, slices and colour can be used",
            str(path),
            "save one channel and one time",
        )
    return _levels(pixels, is_colour)


def _read_nifti(path: Path) -> LevelImage:
    loaded: Any = nibabel.load(path)
    closest: Any = nibabel.as_closest_canonical
    volume = closest(loaded)
    levels = np.asarray(volume.dataobj)
    while levels.ndim > 3 and levels.shape[-1] == 1:
        levels = levels[..., 0]
    if levels.ndim not in (2, 3):
        raise InputError(f"has shape {levels.shape}, not one volume", str(path))
    if levels.dtype.names or levels.dtype.kind == "c":
        raise InputError("holds colour or complex values", str(path), "give grey levels or labels")
    unit = METRES.get(int(volume.header["xyzt_units"]) & 7)
    dx, dy, dz = (float(edge) for edge in volume.header["pixdim"][1:4])
    image = LevelImage(levels.reshape(*levels.shape[:2], -1).T, "NIfTI volume.")
    return image if unit is None else replace(image, pixel=(dz * unit, dy * unit, dx * unit))


def _levels(pixels: NDArray[Any], is_colour: bool) -> LevelImage:
    remark = "Grey levels as stored."
    if is_colour:
        pixels = optical_density(pixels)
        remark = "Colour image: levels are its luminance optical density (0 is white)."
    return LevelImage(pixels[None] if pixels.ndim == 2 else pixels, remark)
