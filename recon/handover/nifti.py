"""Real-valued cubes, maps and masks as NIfTI-1 files, with micrometres in a JSON file beside.

Mapping. Our arrays run (frequency, z, y, x); NIfTI arrays run (x, y, z, frequency). Voxel index
(i, j, k) of the file lies at

    (i·dx, j·dy, height_k)  millimetres,      height_k = base height + (k + ½)·dz

so the file's x, y, z are the instrument's x, y (in the diamond face) and z (out of the face, into
the slice), right-handed, called +x, +y, +z as the standard's "scanner" frame. No patient lies in
it: right, anterior and superior are names only. Millimetres (xyzt code 2), qform and sform code 1
with the same affine in every file: readers treat micrometre units in different ways.
Frequencies ascend: sample m is at toffset + m·pixdim[4], in ppm (unit 40) or Hz (unit 32).

Source: NIfTI-1 data format, Neuroinformatics Technology Initiative, 2007 (nifti1.h).
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from contextlib import ExitStack
from dataclasses import dataclass
from enum import Enum
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.files import atomic_path
from recon.grid import Grid
from recon.handover.placement import INSTRUMENT, Placement

INTENT_ESTIMATE = 1001
INTENT_LABEL = 1002
UNIT_MILLIMETRE = 2
UNIT_SECOND = 8
UNIT_HERTZ = 32
UNIT_PPM = 40
LONGEST_EDGE = 32767
LONGEST_INTENT_NAME = 15
LONGEST_DESCRIPTION = 79


class Part(Enum):
    """Which real part of a complex cube the values are."""

    MAGNITUDE = "magnitude"
    REAL = "real part"


@dataclass(frozen=True)
class PpmAxis:
    """A spectral axis in ppm: sample m at first + m·step, ascending."""

    first: float
    step: float
    unit_code = UNIT_PPM
    unit = "ppm"

    def __post_init__(self) -> None:
        _check_axis(self.first, self.step)


@dataclass(frozen=True)
class HertzAxis:
    """A spectral axis in Hz: sample m at first + m·step, ascending."""

    first: float
    step: float
    unit_code = UNIT_HERTZ
    unit = "Hz"

    def __post_init__(self) -> None:
        _check_axis(self.first, self.step)


@dataclass(frozen=True)
class TimeAxis:
    """A time axis in seconds: sample m at first + m·step."""

    first: float
    step: float
    unit_code = UNIT_SECOND
    unit = "s"

    def __post_init__(self) -> None:
        _check_axis(self.first, self.step)


def affine(grid: Grid) -> NDArray[np.float64]:
    """Voxel indices (i, j, k, 1) of the file to millimetres in the instrument's frame, (4, 4)."""
    return INSTRUMENT.affine(grid)


def write_cube(
    path: Path | str,
    cube: NDArray[Any],
    grid: Grid,
    axis: PpmAxis | HertzAxis | TimeAxis,
    part: Part,
    quantity: str = "signal",
    unit: str = "arbitrary",
    facts: Mapping[str, Any] | None = None,
    placement: Placement = INSTRUMENT,
) -> list[Path]:
    """Write a real cube (f, z, y, x) as a float32 4-D file (x, y, z, f).

    Values that are not finite become 0 and are marked in a mask file (1 = value present) next to
    the cube. A JSON file beside it gives lengths in µm, the spectral axis, `quantity` and `unit`,
    and any further `facts`. Either all files appear or none.

    Returns
    -------
    The files written.

    Raises
    ------
    InputError
        A complex cube, a shape that does not fit the grid, a file name that does not end in
        .nii or .nii.gz, or a folder that cannot be written.
    """
    data = _checked(cube, grid, 4, path)
    image = _image(data, placement.affine(grid), f"{part.value}: {quantity}")
    header = image.header
    header["pixdim"][4] = axis.step
    header["toffset"] = axis.first
    header["xyzt_units"] = UNIT_MILLIMETRE + axis.unit_code
    spectral = {"Unit": axis.unit, "First": axis.first, "Step": axis.step, "Count": len(data)}
    sidecar = _sidecar(grid, quantity, unit) | {"Part": part.value, "SpectralAxis": spectral}
    return _write(Path(path), data, image, grid, sidecar | dict(facts or {}))


def write_map(
    path: Path | str,
    values: NDArray[Any],
    grid: Grid,
    name: str,
    unit: str = "arbitrary",
    facts: Mapping[str, Any] | None = None,
    placement: Placement = INSTRUMENT,
) -> list[Path]:
    """Write one real map (z, y, x) as a float32 3-D file (x, y, z) with `name` as its intent.

    Values that are not finite, the JSON file and errors: as `write_cube`. The intent field holds
    15 bytes of the name; the JSON file holds all of it.
    """
    data = _checked(values, grid, 3, path)
    image = _image(data, placement.affine(grid), f"{name} ({unit})")
    image.header["intent_code"] = INTENT_ESTIMATE
    image.header["intent_name"] = _shortened(name, LONGEST_INTENT_NAME)
    return _write(Path(path), data, image, grid, _sidecar(grid, name, unit) | dict(facts or {}))


def write_mask(
    path: Path | str,
    mask: NDArray[Any],
    grid: Grid,
    name: str = "mask",
    placement: Placement = INSTRUMENT,
) -> list[Path]:
    """Write labels or a mask (z, y, x), whole numbers 0 to 255, as an 8-bit 3-D label file."""
    path = Path(path)
    _stem(path)
    values = np.asarray(mask)
    if values.shape != grid.shape:
        raise InputError(f"mask of shape {values.shape} on a grid of {grid.shape}", str(path))
    labels = values.astype(np.uint8)
    if not np.array_equal(labels, values):
        raise InputError("labels must be whole numbers from 0 to 255", str(path))
    with atomic_path(path) as temporary:
        nibabel.save(_label_image(labels, placement.affine(grid), name), temporary)
    return [path]


def _check_axis(first: float, step: float) -> None:
    if not (np.isfinite(first) and np.isfinite(step) and step > 0):
        raise InputError(
            f"first value {first:g} and step {step:g} must be finite and the step positive",
            "spectral axis",
            "reverse the cube so that the axis ascends",
        )


def _checked(values: NDArray[Any], grid: Grid, dimensions: int, path: Path | str) -> NDArray[Any]:
    values = np.asarray(values)
    if np.iscomplexobj(values):
        raise InputError("the values are complex", str(path), "give the magnitude or the real part")
    if values.ndim != dimensions or values.shape[-3:] != grid.shape or not values.size:
        raise InputError(f"values of shape {values.shape} on a grid of {grid.shape}", str(path))
    if max(values.shape) > LONGEST_EDGE:
        raise InputError(
            f"an axis of {max(values.shape)} samples is too long for NIfTI-1 ({LONGEST_EDGE})",
            str(path),
            "cut it into parts",
        )
    return values


def _image(data: NDArray[Any], where: NDArray[np.float64], description: str) -> Any:
    """A NIfTI-1 image of finite float32 data with the common header facts."""
    with np.errstate(over="ignore"):
        single = data.astype(np.float32)
    filled = np.where(np.isfinite(single), single, np.float32(0))
    return placed(filled, where, description)


def _label_image(labels: NDArray[np.uint8], where: NDArray[np.float64], name: str) -> Any:
    image = placed(labels, where, name)
    image.header["intent_code"] = INTENT_LABEL
    image.header["intent_name"] = _shortened(name, LONGEST_INTENT_NAME)
    return image


def placed(data: NDArray[Any], where: NDArray[np.float64], description: str) -> Any:
    """A NIfTI-1 image of data (…, z, y, x) with an affine in millimetres."""
    new_image: Any = nibabel.Nifti1Image
    image: Any = new_image(data.T, None)
    image.set_sform(where, code=1)
    image.set_qform(where, code=1)
    image.header["xyzt_units"] = UNIT_MILLIMETRE
    image.header["descrip"] = _shortened(description, LONGEST_DESCRIPTION)
    return image


def _shortened(text: str, most: int) -> bytes:
    """UTF-8 cut to `most` bytes, never within a character."""
    return text.encode()[:most].decode(errors="ignore").encode()


def _sidecar(grid: Grid, quantity: str, unit: str) -> dict[str, Any]:
    dz, dy, dx = (float(f"{edge * 1e6:.9g}") for edge in grid.voxel)
    heights = [float(f"{height * 1e6:.9g}") for height in grid.heights]
    return {
        "Quantity": quantity,
        "QuantityUnit": unit,
        "VoxelSize_um": {"x": dx, "y": dy, "z": dz},
        "SliceHeights_um": heights,
        "AxisOrder": "file (x, y, z, frequency); x, y in the diamond face, z away from it",
        "Origin": "centre of the first voxel in x and y; the diamond face in z",
        "Caution": "Research use only, not for diagnosis.",
    }


def _stem(path: Path) -> Path:
    """The path without .nii or .nii.gz."""
    for ending in (".nii.gz", ".nii"):
        if path.name.endswith(ending) and len(path.name) > len(ending):
            return path.with_name(path.name[: -len(ending)])
    raise InputError("the file name must end in .nii.gz or .nii", str(path))


def _write(
    path: Path, data: NDArray[Any], image: Any, grid: Grid, sidecar: dict[str, Any]
) -> list[Path]:
    """Write image, mask if one is needed, and JSON; all are ready before the first appears."""
    stem = _stem(path)
    mask_path = stem.with_name(f"{stem.name}_mask{path.name[len(stem.name) :]}")
    json_path = stem.with_name(f"{stem.name}.json")
    with np.errstate(over="ignore"):
        present = np.isfinite(data.astype(np.float32))
    with ExitStack() as stack:
        written = [path, json_path]
        nibabel.save(image, stack.enter_context(atomic_path(path)))
        if not present.all():
            sidecar = sidecar | {"Mask": mask_path.name}
            labels = placed(present.astype(np.uint8), image.get_sform(), "1 = value present")
            labels.header["intent_code"] = INTENT_LABEL
            for field in ("toffset", "xyzt_units"):
                labels.header[field] = image.header[field]
            labels.header["pixdim"][4] = image.header["pixdim"][4]
            nibabel.save(labels, stack.enter_context(atomic_path(mask_path)))
            written.append(mask_path)
        text = json.dumps(sidecar, indent=2, ensure_ascii=False, allow_nan=False)
        stack.enter_context(atomic_path(json_path)).write_text(text + "\n", encoding="utf-8")
    return written
