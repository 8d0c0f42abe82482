"""One result as a dataset that an imaging group opens without our package.

    dataset_description.json   README   [participants.tsv]
    sub-01/mrs/sub-01_mrsi.nii.gz + .json            complex time-domain cube, NIfTI-MRS
    derivatives/nearspin/dataset_description.json
    derivatives/nearspin/sub-01/mrs/
        sub-01_desc-spectrum_mrsmap.nii.gz + .json   real spectrum, ppm ascending
        sub-01_desc-<species>_mrsmap.nii.gz          amounts in mM
        sub-01_desc-<species>Error_mrsmap.nii.gz     their standard errors
        sub-01_desc-<species>Labels_mrsmap.nii.gz    readable or not, and why
        sub-01_desc-<species>Width<Y>_mrsmap.nii.gz  width of the point response in µm
        sub-01_desc-micrograph_mrsmap.nii.gz         an accompanying image on the same grid

Every file has the same affine, in millimetres. The dataset is written into a hidden folder beside
its target and renamed: it appears whole or not at all. Source: Brain Imaging Data Structure
1.10; derived maps are kept out of the raw tree because `desc-` is not allowed there.
"""

from __future__ import annotations

import json
import re
import shutil
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.files import write_failure
from recon.grid import Grid
from recon.handover import nifti
from recon.handover.labels import Labels
from recon.handover.placement import INSTRUMENT, Placement
from recon.handover.spectroscopy import write_time_cube
from recon.result import Account, Cube, Result, SpeciesMaps
from recon.specimen import GridDescription

BIDS_VERSION = "1.10.0"
WIDTHS = "PointWidth_m"
CAUTION = "Research use only, not for diagnosis."
AXES = ("Z", "Y", "X")
OF_A_SPECIES = ("", "Error", "Labels", *(f"Width{axis}" for axis in AXES))
OF_THE_DATASET = ("spectrum", "cubeError", "micrograph")


@dataclass(frozen=True)
class Subject:
    """Whose slice it is: the BIDS label, and a row of participants.tsv if there is one."""

    label: str = "01"
    participant: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if not re.fullmatch(r"[A-Za-z0-9]+", self.label):
            raise InputError(f"subject label '{self.label}' must be letters and digits", "dataset")


@dataclass(frozen=True, eq=False)
class Delivery:
    """What is handed over.

    Attributes
    ----------
    maps, cube
        Either or both; on the same grid.
    placement
        Where the slice lies in the user's frame.
    subject
        Whose it is.
    micrograph
        An image already on the grid, (nz, ny, nx), or None.
    name
        Of the dataset.
    labels
        Which voxels can be read; by default from the limits of detection and quantification.
    """

    maps: SpeciesMaps | None = None
    cube: Cube | None = None
    placement: Placement = INSTRUMENT
    subject: Subject = field(default_factory=Subject)
    micrograph: NDArray[Any] | None = None
    name: str = "near-field spectroscopic imaging"
    labels: Labels | None = None

    def __post_init__(self) -> None:
        if self.maps is None and self.cube is None:
            raise InputError("neither maps nor cube to hand over", "dataset")
        if self.maps is not None and self.cube is not None and self.maps.grid != self.cube.grid:
            raise InputError("maps and cube lie on different grids", "dataset")
        if self.maps is not None:
            _check_keys(self.maps.names)
        shape = None if self.maps is None else self.maps.values.shape
        if self.labels is not None and self.labels.values.shape != shape:
            raise InputError(f"labels of shape {self.labels.values.shape}, not {shape}", "dataset")
        self.placement.check_precision(self.grid)

    @property
    def grid(self) -> Grid:
        """The common grid."""
        result = self.maps if self.maps is not None else self.cube
        assert result is not None
        return result.grid

    def write(self, folder: Path | str, *, replace: bool = False) -> list[Path]:
        """Write the dataset; the files, relative to `folder`.

        Raises
        ------
        InputError
            The folder exists and is not to be replaced, or cannot be written.
        """
        target = Path(folder)
        if target.exists() and not replace:
            raise InputError("exists already", str(target), "choose another folder, or replace it")
        with _whole_folder(target) as inside:
            _Writer(self, inside).write()
            return sorted(path.relative_to(inside) for path in inside.rglob("*") if path.is_file())


class _Writer:
    """Writes one delivery into an empty folder."""

    def __init__(self, delivery: Delivery, folder: Path) -> None:
        self.delivery, self.folder = delivery, folder
        self.stem = f"sub-{delivery.subject.label}"
        self.derived = folder / "derivatives" / "nearspin" / self.stem / "mrs"

    def write(self) -> None:
        self._descriptions()
        if self.delivery.cube is not None:
            self._cube(self.delivery.cube)
        if self.delivery.maps is not None:
            self._maps(self.delivery.maps)
        if self.delivery.micrograph is not None:
            nifti.write_map(
                self._derived("micrograph"),
                self.delivery.micrograph,
                self.delivery.grid,
                "micrograph",
                "image level",
                {"Description": "An accompanying image resampled onto the grid by area."},
                self.delivery.placement,
            )

    def _descriptions(self) -> None:
        name = self.delivery.name
        raw = {"Name": name, "BIDSVersion": BIDS_VERSION, "DatasetType": "raw"}
        made = {"Name": "nearspin", "Description": "Reconstruction from sensor records"}
        derived = {
            "Name": f"{name}: maps",
            "BIDSVersion": BIDS_VERSION,
            "DatasetType": "derivative",
            "GeneratedBy": [made],
        }
        _write_json(self.folder / "dataset_description.json", raw | {"GeneratedBy": [made]})
        _write_json(self.derived.parents[1] / "dataset_description.json", derived)
        (self.folder / "README").write_text(_readme(self.delivery), encoding="utf-8")
        row = {"participant_id": self.stem} | dict(self.delivery.subject.participant)
        if self.delivery.subject.participant:
            table = "\t".join(row) + "\n" + "\t".join(row.values()) + "\n"
            (self.folder / "participants.tsv").write_text(table, encoding="utf-8")

    def _cube(self, cube: Cube) -> None:
        placement = self.delivery.placement
        where = self.folder / self.stem / "mrs" / f"{self.stem}_mrsi.nii.gz"
        write_time_cube(where, cube, placement, _facts(cube, placement) | _cube_facts(cube))
        ppm, spectrum = cube.spectrum()
        axis = nifti.PpmAxis(float(ppm[0]), float(ppm[1] - ppm[0]))
        nifti.write_cube(
            self._derived("spectrum"),
            spectrum.real,
            cube.grid,
            axis,
            nifti.Part.REAL,
            "spectrum of transverse magnetisation",
            "A/m s",
            _facts(cube, placement),
            placement,
        )
        if cube.standard_error is not None:
            nifti.write_cube(
                self._derived("cubeError"),
                cube.standard_error,
                cube.grid,
                nifti.TimeAxis(float(cube.sample_times[0]), cube.dwell),
                nifti.Part.MAGNITUDE,
                "standard error of a time sample",
                "A/m",
                _facts(cube, placement),
                placement,
            )

    def _maps(self, maps: SpeciesMaps) -> None:
        labels = self.delivery.labels or Labels.derived(maps)
        for place, name in enumerate(maps.names):
            key = entity(name)
            facts: dict[str, Any] = {"Species": name, "Order": place}
            if maps.resolution is not None:
                facts[WIDTHS] = _plain(maps.resolution[place].tolist())
            self._map(key, maps.values[place], maps, name, "mM", facts)
            if maps.standard_error is not None:
                error = maps.standard_error[place]
                self._map(f"{key}Error", error, maps, f"{name} standard error", "mM")
            self._labels(f"{key}Labels", labels.values[place], labels.meaning, name)
            if maps.resolution is not None:
                for axis, widths in zip(AXES, maps.resolution[place].T, strict=True):
                    spread = np.broadcast_to(widths[:, None, None] * 1e6, maps.grid.shape)
                    title = f"{name} width of the point response along {axis.lower()}"
                    self._map(f"{key}Width{axis}", spread, maps, title, "um")

    def _map(
        self,
        key: str,
        values: NDArray[Any],
        result: Result,
        title: str,
        unit: str,
        more: Mapping[str, Any] | None = None,
    ) -> None:
        placement = self.delivery.placement
        facts = _facts(result, placement) | dict(more or {})
        nifti.write_map(self._derived(key), values, result.grid, title, unit, facts, placement)

    def _labels(
        self, key: str, values: NDArray[Any], meaning: Mapping[int, str], name: str
    ) -> None:
        path, grid = self._derived(key), self.delivery.grid
        nifti.write_mask(path, values, grid, name, self.delivery.placement)
        numbers = {str(label): text for label, text in meaning.items()}
        facts = {"Species": name, "Labels": numbers, "Caution": CAUTION}
        _write_json(path.with_name(path.name.removesuffix(".nii.gz") + ".json"), facts)

    def _derived(self, key: str) -> Path:
        return self.derived / f"{self.stem}_desc-{key}_mrsmap.nii.gz"


def entity(name: str) -> str:
    """A species' name as a BIDS label: letters and digits in camel case.

    Raises
    ------
    InputError
        Nothing is left of the name.
    """
    words = re.findall(r"[A-Za-z0-9]+", name)
    if not words:
        raise InputError(f"species '{name}' has no letters or digits for a file name", "dataset")
    return words[0] + "".join(word[:1].upper() + word[1:] for word in words[1:])


def _facts(result: Result, placement: Placement) -> dict[str, Any]:
    """What every sidecar of a result tells of it."""
    account: Account = result.account
    description = GridDescription.of(result.grid)
    facts = {
        "Grid": json.loads(description.to_json()),
        "Frame": placement.frame,
        "Prior": account.prior,
        "PriorWeights": dict(account.weights),
        "WhyStopped": account.why_stopped,
        "Misfit": account.misfit,
        "Provenance": dict(account.provenance),
        "Remarks": list(account.remarks),
        "Caution": CAUTION,
    }
    return dict(_plain(facts))


def _cube_facts(cube: Cube) -> dict[str, Any]:
    facts = {
        "SampleTimes_s": np.asarray(cube.sample_times, float).tolist(),
        "LarmorFrequency_Hz": cube.larmor_frequency,
    }
    if cube.resolution is not None:
        facts[WIDTHS] = _plain(cube.resolution.tolist())
    return facts


def _plain(value: Any) -> Any:
    """The same with numbers that JSON does not know written as text ("nan", "inf")."""
    if isinstance(value, Mapping):
        return {key: _plain(one) for key, one in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(one) for one in value]
    return str(value) if isinstance(value, float) and not np.isfinite(value) else value


def _check_keys(names: Sequence[str]) -> None:
    """Refuse names that would write one file twice, also where case does not count."""
    taken = {key.casefold(): "a file of the dataset" for key in OF_THE_DATASET}
    for name in names:
        for ending in OF_A_SPECIES:
            key = (entity(name) + ending).casefold()
            if key in taken:
                raise InputError(
                    f"species '{name}' shares a file name with {taken[key]}",
                    "dataset",
                    "rename the species",
                )
            taken[key] = f"'{name}'"


def _readme(delivery: Delivery) -> str:
    result = delivery.maps if delivery.maps is not None else delivery.cube
    assert result is not None
    dz, dy, dx = (edge * 1e6 for edge in result.grid.voxel)
    remarks = "".join(f"- {remark}\n" for remark in result.account.remarks)
    return (
        f"{delivery.name}\n\n{CAUTION}\n"
        "The images are estimates that rest on the assumption stated in each sidecar; they must\n"
        "not be read clinically.\n\n"
        f"Voxels of {dx:g} x {dy:g} x {dz:g} um; affines in millimetres, frame:\n"
        f"{delivery.placement.frame}. The files' first two axes lie in the diamond face,\n"
        "the third points away from it.\n"
        "Amounts in mM (mmol per litre of voxel) with standard errors in mM beside them. The\n"
        "Labels files say which voxels can be read, and why not.\n\n"
        f"Assumed: {result.account.prior}.\n{remarks}"
    )


def _write_json(path: Path, facts: Mapping[str, Any]) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    text = json.dumps(facts, indent=2, ensure_ascii=False, allow_nan=False)
    path.write_text(text + "\n", encoding="utf-8")


@contextmanager
def _whole_folder(target: Path) -> Iterator[Path]:
    """A hidden folder beside the target that takes its name when all is written."""
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        inside = Path(tempfile.mkdtemp(prefix=".partial-", dir=target.parent))
    except OSError as error:
        raise write_failure(target, error) from error
    old = inside.with_name(inside.name + "-old")
    try:
        yield inside
        inside.chmod(0o755)
        if target.exists():
            target.rename(old)
        inside.rename(target)
    except OSError as error:
        if old.exists() and not target.exists():
            old.rename(target)
        raise write_failure(target, error) from error
    finally:
        shutil.rmtree(inside, ignore_errors=True)
        shutil.rmtree(old, ignore_errors=True)
