"""Read a dataset back into our own results."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.handover.dataset import WIDTHS
from recon.handover.spectroscopy import read_time_cube
from recon.result import Account, Cube, SpeciesMaps
from recon.specimen import GridDescription


def read_dataset(folder: Path | str) -> tuple[SpeciesMaps | None, Cube | None]:
    """Maps and cube of a dataset that `Delivery.write` wrote, without loss.

    Raises
    ------
    InputError
        The folder holds neither, or a file is missing or damaged.
    """
    root = Path(folder)
    cubes = sorted(root.glob("sub-*/mrs/*_mrsi.nii.gz"))
    found = [
        (path, facts)
        for path in sorted(root.glob("derivatives/nearspin/sub-*/mrs/*_mrsmap.json"))
        if "Order" in (facts := _json(path))
    ]
    if not cubes and not found:
        raise InputError("holds no dataset of ours", str(root))
    maps = _maps(sorted(found, key=lambda one: one[1]["Order"])) if found else None
    return maps, _cube(cubes[0], root) if cubes else None


def _maps(found: list[tuple[Path, dict[str, Any]]]) -> SpeciesMaps:
    values = [_values(_image(path)) for path, _ in found]
    errors = [_values(_image(path, "Error")) for path, _ in found if _image(path, "Error").exists()]
    facts = found[0][1]
    return SpeciesMaps(
        grid=GridDescription.from_json(json.dumps(facts["Grid"])).grid(),
        values=np.stack(values),
        standard_error=np.stack(errors) if errors else None,
        resolution=_widths([one[WIDTHS] for _, one in found]) if WIDTHS in facts else None,
        account=_account(facts),
        names=tuple(one["Species"] for _, one in found),
    )


def _cube(path: Path, root: Path) -> Cube:
    values, header, _, _ = read_time_cube(path)
    facts = _json(path.with_name(path.name.removesuffix(".nii.gz") + ".json"))
    stem = path.name.removesuffix("_mrsi.nii.gz")
    derived = root / "derivatives" / "nearspin" / stem / "mrs"
    error = derived / f"{stem}_desc-cubeError_mrsmap.nii.gz"
    return Cube(
        standard_error=_values(error) if error.exists() else None,
        grid=GridDescription.from_json(json.dumps(facts["Grid"])).grid(),
        values=values,
        account=_account(facts),
        sample_times=np.array(facts["SampleTimes_s"]),
        resolution=_widths(facts[WIDTHS]) if WIDTHS in facts else None,
        larmor_frequency=facts["LarmorFrequency_Hz"],
        reference_shift_ppm=header["ReferenceShift_ppm"]["Value"],
    )


def _account(facts: dict[str, Any]) -> Account:
    return Account(
        prior=facts["Prior"],
        weights={name: float(one) for name, one in facts["PriorWeights"].items()},
        why_stopped=facts["WhyStopped"],
        misfit=float(facts["Misfit"]),
        provenance=facts["Provenance"],
        remarks=tuple(facts["Remarks"]),
    )


def _widths(rows: Any) -> NDArray[np.float64]:
    return np.array(rows, dtype=object).astype(np.float64)


def _image(sidecar: Path, addition: str = "") -> Path:
    stem = sidecar.name.removesuffix("_mrsmap.json")
    return sidecar.with_name(f"{stem}{addition}_mrsmap.nii.gz")


def _values(path: Path) -> NDArray[np.float32]:
    """Values (z, y, x) with NaN where the mask says that there was none."""
    try:
        image: Any = nibabel.load(path)
        values = np.asarray(image.dataobj, np.float32).T.copy()
        mask = path.with_name(path.name.removesuffix(".nii.gz") + "_mask.nii.gz")
        if mask.exists():
            held: Any = nibabel.load(mask)
            values[np.asarray(held.dataobj).T == 0] = np.nan
    except (OSError, EOFError, nibabel.filebasedimages.ImageFileError) as error:
        raise InputError(f"cannot be read ({error})", str(path)) from error
    return values


def _json(path: Path) -> dict[str, Any]:
    try:
        facts = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be read ({error})", str(path)) from error
    return dict(facts)
