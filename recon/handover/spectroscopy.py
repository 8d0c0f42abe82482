"""The complex time-domain cube as a NIfTI-MRS file.

complex64 (x, y, z, t), pixdim[4] the dwell in seconds, intent `mrs_v0_9`, and first among the
header extensions one of code 44 with JSON. A line at δ ppm is stored as
exp(−i 2π (δ − δ_ref)·1e-6·f t),
the sign in which our cubes are kept. Source: NIfTI-MRS standard, version 0.9 (Clarke et al.,
Magn. Reson. Med. 88:2358, 2022).
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.files import atomic_path
from recon.handover.nifti import UNIT_MILLIMETRE, UNIT_SECOND, placed
from recon.handover.placement import INSTRUMENT, Placement
from recon.result import Cube

INTENT = b"mrs_v0_9"
EXTENSION = 44
SHORTEST_ECHO = 1e-6


def header_facts(cube: Cube) -> dict[str, Any]:
    """The standard's fields for a cube; ours carry a description each."""
    first = float(cube.sample_times[0])
    return {
        "SpectrometerFrequency": [cube.larmor_frequency * 1e-6],
        "ResonantNucleus": ["1H"],
        "SpectralWidth": 1 / cube.dwell,
        "EchoTime": max(first, SHORTEST_ECHO),
        "RepetitionTime": max(float(cube.sample_times[-1]) + cube.dwell, SHORTEST_ECHO),
        "kSpace": [False, False, False],
        "ReferenceShift_ppm": {
            "Value": cube.reference_shift_ppm,
            "Description": "Chemical shift of zero frequency, ppm",
        },
        "Quantity": {
            "Value": "transverse magnetisation, A/m",
            "Description": "What the complex values are, and their unit",
        },
        "TimesMean": {
            "Value": "EchoTime: first sample after the excitation, at least 1 us; "
            "RepetitionTime: length of the decay",
            "Description": "What the two times mean here: there is no echo",
        },
    }


def write_time_cube(
    path: Path | str,
    cube: Cube,
    placement: Placement = INSTRUMENT,
    facts: Mapping[str, Any] | None = None,
) -> list[Path]:
    """Write the cube as NIfTI-MRS, and its header facts with further `facts` as JSON beside it.

    Raises
    ------
    InputError
        Samples that are not evenly spaced or not finite, a name not ending in .nii.gz or .nii, or
        a folder that cannot be written.
    """
    path = Path(path)
    if not path.name.endswith((".nii", ".nii.gz")):
        raise InputError("the file name must end in .nii.gz or .nii", str(path))
    values: NDArray[Any] = np.asarray(cube.values, np.complex64)
    if not np.isfinite(values).all():
        raise InputError("the cube holds values that are not finite", str(path))
    header = header_facts(cube)
    image = placed(values, placement.affine(cube.grid), "complex time-domain cube")
    image.header["pixdim"][4] = cube.dwell
    image.header["toffset"] = float(cube.sample_times[0])
    image.header["xyzt_units"] = UNIT_MILLIMETRE + UNIT_SECOND
    image.header["intent_name"] = INTENT
    extension = nibabel.nifti1.Nifti1Extension(EXTENSION, json.dumps(header).encode())
    image.header.extensions.insert(0, extension)
    beside = path.with_name(path.name.removesuffix(".gz").removesuffix(".nii") + ".json")
    with atomic_path(path) as temporary, atomic_path(beside) as sidecar:
        nibabel.save(image, temporary)
        text = json.dumps(
            sidecar_facts(header) | dict(facts or {}),
            indent=2,
            ensure_ascii=False,
            allow_nan=False,
        )
        sidecar.write_text(text + "\n", encoding="utf-8")
    return [path, beside]


def sidecar_facts(header: Mapping[str, Any]) -> dict[str, Any]:
    """The header's facts in the form that the BIDS sidecar of an mrsi file takes."""
    return {
        "ResonantNucleus": header["ResonantNucleus"][0],
        "SpectrometerFrequency": header["SpectrometerFrequency"][0],
        "SpectralWidth": header["SpectralWidth"],
        "EchoTime": header["EchoTime"],
        "RepetitionTime": header["RepetitionTime"],
        "ReferenceShift_ppm": header["ReferenceShift_ppm"]["Value"],
        "Quantity": header["Quantity"]["Value"],
        "TimesMean": header["TimesMean"]["Value"],
    }


def read_time_cube(path: Path | str) -> tuple[NDArray[np.complex64], dict[str, Any], float, float]:
    """Values (times, z, y, x), header facts, dwell and first time in seconds.

    Raises
    ------
    InputError
        The file is not NIfTI, or has no header extension of code 44.
    """
    try:
        image: Any = nibabel.load(path)
        values = np.asarray(image.dataobj, np.complex64).T
    except (OSError, nibabel.filebasedimages.ImageFileError, EOFError) as error:
        raise InputError(f"cannot be read ({error})", str(path)) from error
    codes = [one.get_code() for one in image.header.extensions]
    if EXTENSION not in codes:
        raise InputError("has no header extension of code 44", str(path), "is it NIfTI-MRS?")
    content = image.header.extensions[codes.index(EXTENSION)].get_content()
    facts = json.loads(content if isinstance(content, str) else bytes(content).decode())
    return values, facts, float(image.header["pixdim"][4]), float(image.header["toffset"])
