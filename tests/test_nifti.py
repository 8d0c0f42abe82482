"""NIfTI files read back by two general readers: nibabel and SimpleITK."""

from __future__ import annotations

import errno
import json
import warnings

import nibabel
import numpy as np
import pytest
import SimpleITK

from recon.errors import InputError
from recon.grid import Grid
from recon.handover import nifti
from recon.handover.nifti import HertzAxis, Part, PpmAxis, affine, write_cube, write_map, write_mask

ANISOTROPIC = Grid((3, 4, 5), (4e-6, 2e-6, 1e-6), base_height=1.5e-6)
GRIDS = {
    "anisotropic": ANISOTROPIC,
    "0.1 µm": Grid((3, 4, 5), (0.1e-6, 0.1e-6, 0.1e-6), base_height=0.3e-6),
    "20 µm": Grid((3, 4, 5), (20e-6, 20e-6, 20e-6)),
    "one slice": Grid((1, 4, 5), (2e-6, 3e-6, 7e-6)),
}


def asymmetric(shape):
    """No two values alike, so that any transposition or flip shows."""
    return (np.arange(np.prod(shape)).reshape(shape) + 1) * 0.5


@pytest.fixture(params=GRIDS, ids=str)
def grid(request):
    return GRIDS[request.param]


def itk_affine(image):
    """Affine in the NIfTI frame from a reader whose frame has x and y reversed (ITK manual)."""
    spacing, direction = np.array(image.GetSpacing())[:3], np.array(image.GetDirection())
    size = round(np.sqrt(len(direction)))
    matrix = np.eye(4)
    matrix[:3, :3] = direction.reshape(size, size)[:3, :3] * spacing
    matrix[:3, 3] = np.array(image.GetOrigin())[:3]
    return np.diag([-1, -1, 1, 1]) @ matrix


def test_both_readers_find_the_same_map_and_affine(tmp_path, grid):
    values = asymmetric(grid.shape)
    path = tmp_path / "lactate.nii.gz"
    assert write_map(path, values, grid, "lactate", "mM") == [path, tmp_path / "lactate.json"]
    image = nibabel.load(path)
    stored = image.get_fdata()
    assert stored.shape == grid.shape[::-1]
    np.testing.assert_array_equal(stored.T, values)
    np.testing.assert_allclose(image.affine, affine(grid), rtol=1e-6)
    other = SimpleITK.ReadImage(str(path))
    np.testing.assert_array_equal(SimpleITK.GetArrayFromImage(other), values)
    np.testing.assert_allclose(itk_affine(other), affine(grid), rtol=1e-5, atol=1e-10)


def test_both_readers_find_the_same_cube(tmp_path, grid):
    cube = asymmetric((6, *grid.shape))
    path = tmp_path / "cube.nii"
    write_cube(path, cube, grid, PpmAxis(-1.0, 0.25), Part.REAL)
    image = nibabel.load(path)
    np.testing.assert_array_equal(image.get_fdata(), cube.transpose(3, 2, 1, 0))
    np.testing.assert_allclose(image.affine, affine(grid), rtol=1e-6)
    other = SimpleITK.ReadImage(str(path))
    np.testing.assert_array_equal(SimpleITK.GetArrayFromImage(other), cube)
    np.testing.assert_allclose(itk_affine(other), affine(grid), rtol=1e-5, atol=1e-10)
    assert other.GetSpacing()[3] == pytest.approx(0.25)


def test_every_file_of_a_scan_has_one_affine_in_qform_and_sform(tmp_path, grid):
    write_map(tmp_path / "m.nii.gz", asymmetric(grid.shape), grid, "water")
    write_cube(
        tmp_path / "c.nii.gz", asymmetric((2, *grid.shape)), grid, HertzAxis(0, 5), Part.REAL
    )
    write_mask(tmp_path / "k.nii.gz", np.ones(grid.shape, bool), grid)
    forms = []
    for name in "mck":
        header = nibabel.load(tmp_path / f"{name}.nii.gz").header
        assert header["qform_code"] == header["sform_code"] == 1
        np.testing.assert_array_equal(header.get_qform(), header.get_sform())
        forms.append(header.get_sform())
        assert np.linalg.det(forms[-1][:3, :3]) > 0
        assert header["sizeof_hdr"] == 348 and header["magic"].item() == b"n+1"
    np.testing.assert_array_equal(forms[0], forms[1])
    np.testing.assert_array_equal(forms[0], forms[2])


def test_first_voxel_is_centred_on_the_lateral_origin_at_its_height():
    np.testing.assert_allclose(affine(ANISOTROPIC) @ [0, 0, 0, 1], [0, 0, 3.5e-3, 1])
    np.testing.assert_allclose(affine(ANISOTROPIC) @ [4, 3, 2, 1], [4e-3, 6e-3, 11.5e-3, 1])


@pytest.mark.parametrize(("axis", "code"), [(PpmAxis(0.5, 0.02), 40), (HertzAxis(-100, 4), 32)])
def test_spectral_axis_in_the_header(tmp_path, axis, code):
    path = tmp_path / "cube.nii.gz"
    cube = asymmetric((7, *ANISOTROPIC.shape))
    write_cube(path, cube, ANISOTROPIC, axis, Part.MAGNITUDE, "spectrum", "T")
    header = nibabel.load(path).header
    assert int(header["xyzt_units"]) == 2 + code
    assert float(header["toffset"]) == pytest.approx(axis.first)
    assert float(header["pixdim"][4]) == pytest.approx(axis.step)
    assert header.get_data_dtype() == np.float32
    assert header["descrip"].item().decode() == "magnitude: spectrum"
    sidecar = json.loads((tmp_path / "cube.json").read_text())
    assert sidecar["SpectralAxis"]["Count"] == 7 and sidecar["QuantityUnit"] == "T"


def test_map_intent_and_micrometres_beside_it(tmp_path):
    name = "a rather long näme of a species"
    write_map(tmp_path / "m.nii.gz", asymmetric((3, 4, 5)), ANISOTROPIC, name, "mM", {"Shots": 64})
    header = nibabel.load(tmp_path / "m.nii.gz").header
    assert int(header["intent_code"]) == 1001
    assert header["intent_name"].item().decode() == "a rather long n"
    assert int(header["xyzt_units"]) == 2
    sidecar = json.loads((tmp_path / "m.json").read_text())
    assert sidecar["Quantity"] == name and sidecar["Shots"] == 64
    assert sidecar["VoxelSize_um"] == {"x": 1.0, "y": 2.0, "z": 4.0}
    assert sidecar["SliceHeights_um"] == [3.5, 7.5, 11.5]


@pytest.mark.parametrize("bad", [np.nan, np.inf, 1e300])
def test_values_that_are_not_finite_are_filled_and_masked(tmp_path, bad):
    values = asymmetric((3, 4, 5))
    values[2, 1, 0] = bad
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        written = write_map(tmp_path / "m.nii.gz", values, ANISOTROPIC, "error")
    assert written[2] == tmp_path / "m_mask.nii.gz"
    stored = nibabel.load(written[0]).get_fdata()
    mask = nibabel.load(written[2])
    assert np.isfinite(stored).all() and stored[0, 1, 2] == 0
    assert int(mask.header["intent_code"]) == 1002
    assert mask.get_fdata()[0, 1, 2] == 0 and mask.get_fdata().sum() == 59
    assert json.loads((tmp_path / "m.json").read_text())["Mask"] == "m_mask.nii.gz"


def test_a_cube_with_a_gap_has_a_mask_of_its_own_shape(tmp_path):
    cube = asymmetric((2, 3, 4, 5))
    cube[1] = np.nan
    written = write_cube(tmp_path / "c.nii", cube, ANISOTROPIC, PpmAxis(0, 1), Part.REAL)
    mask = nibabel.load(written[2])
    np.testing.assert_array_equal(mask.get_fdata(), np.isfinite(cube).T)
    assert float(mask.header["pixdim"][4]) == 1


def test_labels_keep_their_numbers(tmp_path):
    labels = np.arange(60).reshape(3, 4, 5)
    write_mask(tmp_path / "kinds.nii.gz", labels, ANISOTROPIC, "fibre kinds")
    image = nibabel.load(tmp_path / "kinds.nii.gz")
    assert image.get_data_dtype() == np.uint8 and int(image.header["intent_code"]) == 1002
    np.testing.assert_array_equal(image.get_fdata().T, labels)


def test_bad_input_is_refused_in_one_line(tmp_path):
    values, path = asymmetric((3, 4, 5)), tmp_path / "m.nii.gz"
    trials = {
        "complex": lambda: write_map(path, values * 1j, ANISOTROPIC, "m"),
        "shape": lambda: write_map(path, values.T, ANISOTROPIC, "m"),
        "end in": lambda: write_map(tmp_path / "m.img", values, ANISOTROPIC, "m"),
        "end in .nii": lambda: write_map(tmp_path / ".nii", values, ANISOTROPIC, "m"),
        "step": lambda: PpmAxis(1.0, -0.1),
        "positive": lambda: HertzAxis(1.0, 0.0),
        "finite": lambda: HertzAxis(np.nan, 1.0),
        "whole": lambda: write_mask(path, values, ANISOTROPIC),
        "mask of shape": lambda: write_mask(path, values[0], ANISOTROPIC),
        "too long": lambda: write_cube(
            path,
            np.zeros((40000, 1, 1, 1), np.float32),
            Grid((1, 1, 1), (1e-6, 1e-6, 1e-6)),
            PpmAxis(0, 1),
            Part.REAL,
        ),
    }
    for message, trial in trials.items():
        with pytest.raises(InputError, match=message) as caught:
            trial()
        assert "\n" not in str(caught.value)
    assert not list(tmp_path.iterdir())


def test_a_full_disk_leaves_nothing_and_touches_nothing(tmp_path, monkeypatch):
    path = tmp_path / "m.nii.gz"
    write_map(path, asymmetric((3, 4, 5)), ANISOTROPIC, "before")
    before = {file.name: file.read_bytes() for file in tmp_path.iterdir()}
    real, calls = nifti.nibabel.save, []

    def full(image, target):
        calls.append(target)
        if len(calls) == 2:
            raise OSError(errno.ENOSPC, "No space left on device")
        real(image, target)

    monkeypatch.setattr(nifti.nibabel, "save", full)
    values = asymmetric((3, 4, 5))
    values[0, 0, 0] = np.nan
    with pytest.raises(InputError, match="No space left"):
        write_map(path, values, ANISOTROPIC, "after")
    assert {file.name: file.read_bytes() for file in tmp_path.iterdir()} == before


def test_a_folder_that_cannot_be_written(tmp_path):
    (tmp_path / "file").write_text("not a folder")
    with pytest.raises(InputError, match="cannot write"):
        write_map(tmp_path / "file" / "m.nii.gz", asymmetric((3, 4, 5)), ANISOTROPIC, "m")
