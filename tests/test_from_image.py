"""Specimens from images: pixel sizes, tables, placing, and amounts that are kept."""

from __future__ import annotations

import nibabel
import numpy as np
import pytest
import tifffile
from PIL import Image

from recon.errors import InputError
from recon.grid import Grid
from recon.specimen import Species
from recon.specimens.from_image import (
    Corner,
    FadingSlab,
    LeaningSlab,
    overlap,
    specimen_from_image,
)
from recon.specimens.image_file import optical_density, read_image
from recon.specimens.level_table import GreyLevels, LabelLevels, LevelTable, load_level_table

GRID = Grid((2, 4, 6), (3e-6, 2e-6, 2e-6))
WATER = Species(
    name="water",
    shift_ppm=4.7,
    equivalent_nuclei=2,
    t2_star_ms=20,
    t1_s=1,
    diffusion_um2_per_ms=2,
)
LACTATE = Species(
    name="lactate",
    shift_ppm=1.33,
    equivalent_nuclei=3,
    t2_star_ms=50,
    t1_s=1,
    diffusion_um2_per_ms=0.2,
)
GREY = LevelTable(
    (WATER, LACTATE), GreyLevels(np.array([0.0, 100.0]), np.array([[50.0, 0.0], [0.0, 10.0]]))
)
LABELS = LevelTable(
    (WATER, LACTATE),
    LabelLevels(np.array([0.0, 1.0, 7.0]), np.array([[0.0, 0.0], [40.0, 3.0], [30.0, 20.0]])),
)
TABLE = """
reading = "grey"
notes = "levels of an invented stain"

[[species]]
name = "lactate"
shift_ppm = 1.33
equivalent_nuclei = 3
t2_star_ms = 50.0
t1_s = 1.0
diffusion_um2_per_ms = 0.2

[[level]]
level = 200
concentration_mM = { lactate = 30.0 }

[[level]]
level = 0
concentration_mM = { lactate = 2.0 }
"""


def picture(tmp_path, pixels, name="stain.png"):
    path = tmp_path / name
    Image.fromarray(pixels).save(path)
    return path


def asymmetric(rows=8, columns=12):
    return (np.arange(rows * columns).reshape(rows, columns) % 100).astype(np.uint8)


def test_pixels_of_voxel_size_land_one_to_one(tmp_path):
    pixels = asymmetric(4, 6)
    specimen = specimen_from_image(picture(tmp_path, pixels), GREY, GRID, pixel_um=2.0)
    np.testing.assert_allclose(specimen.maps[1], np.stack([pixels / 10] * 2), rtol=1e-5)
    np.testing.assert_allclose(specimen.maps[0], np.stack([50 - pixels / 2] * 2), rtol=1e-5)


@pytest.mark.parametrize("pixel_um", [0.37, 1.0, 2.0, 3.1])
def test_amounts_are_kept_at_any_pixel_size(tmp_path, pixel_um):
    rows, columns = (int(extent // pixel_um) for extent in (8.0, 12.0))
    pixels = asymmetric(rows, columns)
    path = picture(tmp_path, pixels)
    specimen = specimen_from_image(path, GREY, GRID, pixel_um=pixel_um, refinement=(1, 3, 2))
    sub_voxel = 2.0 / 3 * 2.0 / 2
    amount = specimen.maps[1, 0].sum(dtype=float) * sub_voxel
    assert amount == pytest.approx(pixels.sum(dtype=float) / 10 * pixel_um**2, rel=1e-4)


def test_contents_are_averaged_not_levels(tmp_path):
    table = LevelTable(
        (LACTATE,), GreyLevels(np.array([0.0, 50.0, 100.0]), np.array([[0.0], [0.0], [8.0]]))
    )
    pixels = np.tile(np.array([[0, 100], [100, 0]], np.uint8), (4, 6))
    specimen = specimen_from_image(picture(tmp_path, pixels), table, GRID, pixel_um=1.0)
    np.testing.assert_allclose(specimen.concentrations, 4.0, rtol=1e-5)  # level 50 alone holds 0


def test_a_corner_places_the_crop(tmp_path):
    pixels = asymmetric(30, 40)
    specimen = specimen_from_image(
        picture(tmp_path, pixels), GREY, GRID, pixel_um=2.0, placement=Corner(x_um=10, y_um=6)
    )
    np.testing.assert_allclose(specimen.maps[1, 0], pixels[3:7, 5:11] / 10, rtol=1e-5)


def test_what_the_image_does_not_reach_is_empty(tmp_path):
    pixels = np.full((2, 2), 100, np.uint8)
    specimen = specimen_from_image(picture(tmp_path, pixels), GREY, GRID, pixel_um=2.0)
    expected = np.zeros((4, 6))
    expected[1:3, 2:4] = 10
    np.testing.assert_allclose(specimen.maps[1, 0], expected, rtol=1e-5)
    assert specimen.maps[0].max() == 0


def test_oblong_pixels(tmp_path):
    pixels = asymmetric(2, 6)
    specimen = specimen_from_image(picture(tmp_path, pixels), GREY, GRID, pixel_um=(4.0, 2.0))
    np.testing.assert_allclose(specimen.maps[1, 0], np.repeat(pixels, 2, 0) / 10, rtol=1e-5)


def test_labels_are_looked_up_exactly(tmp_path):
    pixels = np.array([[0, 1, 7, 7, 1, 0]] * 4, np.uint8)
    path = picture(tmp_path, pixels)
    specimen = specimen_from_image(path, LABELS, GRID, pixel_um=2.0)
    np.testing.assert_allclose(specimen.maps[1, 0, 0], [0, 3, 20, 20, 3, 0])
    with pytest.raises(InputError, match="label 3 of the image is not listed"):
        specimen_from_image(picture(tmp_path, pixels // 2), LABELS, GRID, pixel_um=2.0)


def test_palette_picture_gives_its_indices(tmp_path):
    image = Image.fromarray(np.array([[0, 1, 7]], np.uint8))
    image.putpalette(list(range(30)))
    image.save(tmp_path / "labels.png")
    read = read_image(tmp_path / "labels.png")
    np.testing.assert_array_equal(read.levels, [[[0, 1, 7]]])
    assert "indices" in read.remark


def test_sixteen_bit_levels_survive(tmp_path):
    pixels = np.array([[0, 300, 65535]], np.uint16)
    np.testing.assert_array_equal(read_image(picture(tmp_path, pixels)).levels[0], pixels)


def test_colour_becomes_optical_density_and_says_so(tmp_path):
    pixels = np.zeros((4, 6, 3), np.uint8)
    pixels[:2] = 255
    table = LevelTable((LACTATE,), GreyLevels(np.array([0.0, 2.0]), np.array([[0.0], [20.0]])))
    specimen = specimen_from_image(picture(tmp_path, pixels), table, GRID, pixel_um=2.0)
    assert specimen.maps[0, 0, 0].max() < 1e-3
    assert specimen.maps[0, 0, 3].min() == pytest.approx(20)  # black: log10(256) = 2.41, clipped
    assert "optical density" in specimen.notes and "beyond the table" in specimen.notes
    ratio = optical_density(np.full((1, 3), 127, np.uint8))
    assert ratio[0] == pytest.approx(np.log10(2), rel=1e-5)


def test_tiff_stack_keeps_its_slices(tmp_path):
    stack = np.stack([asymmetric(4, 6), asymmetric(4, 6) // 2, asymmetric(4, 6) * 0])
    tifffile.imwrite(tmp_path / "stack.tif", stack, photometric="minisblack")
    specimen = specimen_from_image(
        tmp_path / "stack.tif", GREY, GRID, pixel_um=(2.0, 2.0, 2.0), refinement=(1, 1, 1)
    )
    # 6 µm high grid of two 3 µm voxels over three 2 µm slices: 2/3, 1/3 and 1/3, 2/3
    first, second, third = stack / 10
    np.testing.assert_allclose(specimen.maps[1, 0], (2 * first + second) / 3, rtol=1e-5)
    np.testing.assert_allclose(specimen.maps[1, 1], (second + 2 * third) / 3, rtol=1e-5)
    assert "Stack of 3" in specimen.notes


@pytest.mark.parametrize("shape", [(4, 6, 3), (3, 4, 6), (4, 6)], ids=str)
def test_single_tiff(tmp_path, shape):
    photometric = "rgb" if len(shape) == 3 else "minisblack"
    pixels = np.full(shape, 255, np.uint8)
    tifffile.imwrite(tmp_path / "one.tiff", pixels, photometric=photometric)
    assert read_image(tmp_path / "one.tiff").levels.shape == (1, 4, 6)


def test_tiff_with_times_or_channels_is_refused(tmp_path):
    data = np.zeros((2, 3, 4, 6), np.uint8)
    tifffile.imwrite(tmp_path / "t.tif", data, metadata={"axes": "TZYX"}, ome=True)
    with pytest.raises(InputError, match="axes"):
        read_image(tmp_path / "t.tif")


@pytest.mark.parametrize(("unit", "edge"), [("mm", 2e-3), ("micron", 2.0)])
def test_nifti_brings_its_own_pixel_size_and_axes(tmp_path, unit, edge):
    volume = np.arange(6 * 4 * 2).reshape(6, 4, 2).astype(np.int16)  # (x, y, z)
    image = nibabel.Nifti1Image(volume, np.diag([edge, edge, 1.5 * edge, 1]))
    image.header.set_xyzt_units(xyz=unit)
    nibabel.save(image, tmp_path / "v.nii.gz")
    specimen = specimen_from_image(tmp_path / "v.nii.gz", GREY, GRID)
    np.testing.assert_allclose(specimen.maps[1], volume.T / 10, rtol=1e-4, atol=1e-4)
    flipped = nibabel.Nifti1Image(volume[::-1], np.diag([-edge, edge, 1.5 * edge, 1]))
    flipped.header.set_xyzt_units(xyz=unit)
    nibabel.save(flipped, tmp_path / "f.nii")
    again = specimen_from_image(tmp_path / "f.nii", GREY, GRID)
    np.testing.assert_allclose(again.maps, specimen.maps, rtol=1e-4, atol=1e-4)


def test_nifti_without_a_unit_has_no_pixel_size(tmp_path):
    image = nibabel.Nifti1Image(np.ones((6, 4, 2), np.int16), np.eye(4))
    image.header["xyzt_units"] = 0
    nibabel.save(image, tmp_path / "v.nii")
    with pytest.raises(InputError, match="no pixel size"):
        specimen_from_image(tmp_path / "v.nii", GREY, GRID)
    assert specimen_from_image(tmp_path / "v.nii", GREY, GRID, pixel_um=2.0).maps.any()


def test_depth_assumptions_are_applied_and_written_down(tmp_path):
    path = picture(tmp_path, asymmetric(4, 6))
    flat = specimen_from_image(path, GREY, GRID, pixel_um=2.0)
    fading = specimen_from_image(path, GREY, GRID, pixel_um=2.0, depth=FadingSlab(1.0, 0.0))
    np.testing.assert_allclose(fading.maps[:, 0], 0.75 * flat.maps[:, 0], rtol=1e-5)
    np.testing.assert_allclose(fading.maps[:, 1], 0.25 * flat.maps[:, 1], rtol=1e-5)
    lean = LeaningSlab(lean_x=4 / 3)  # ±1.5 µm from the middle: ±2 µm, one voxel
    leaning = specimen_from_image(path, GREY, GRID, pixel_um=2.0, depth=lean)
    np.testing.assert_allclose(leaning.maps[:, 1, :, 1:], flat.maps[:, 1, :, :-1], atol=1e-3)
    np.testing.assert_allclose(leaning.maps[:, 0, :, :-1], flat.maps[:, 0, :, 1:], atol=1e-3)
    for specimen in (flat, fading, leaning):
        assert "assumption" in specimen.notes and "assumed" in specimen.notes
        assert "stain.png" in specimen.notes


def test_overlap_rows_sum_to_one_where_covered():
    share = overlap(1.0, 0.7, 5, 0.31, 40).toarray()
    np.testing.assert_allclose(share.sum(axis=1), 1, rtol=1e-5)
    centres = (share * (np.arange(40) + 0.5) * 0.31).sum(axis=1)
    np.testing.assert_allclose(centres, 1.35 + 0.7 * np.arange(5), atol=0.05)


def test_table_from_toml(tmp_path):
    (tmp_path / "t.toml").write_text(TABLE)
    table = load_level_table(tmp_path / "t.toml")
    amounts = table.levels.amounts(np.array([-5, 0, 100, 200, 255]), 0)
    np.testing.assert_allclose(amounts, [2, 2, 16, 30, 30])
    specimen = specimen_from_image(picture(tmp_path, asymmetric(4, 6)), table, GRID, pixel_um=2.0)
    assert specimen.notes.endswith("levels of an invented stain")


MISTAKES = {
    "unknown field": ("notes =", "note ="),
    "did you mean": ("shift_ppm", "shift_pm"),
    "listed twice": ("level = 200", "level = 0"),
    "not described": ("{ lactate = 2.0 }", "{ lactate = 2.0, water = 1.0 }"),
    "no concentration of 'lactate'": ("{ lactate = 2.0 }", "{ }"),
    "greater than or equal to 0": ("lactate = 2.0", "lactate = -2.0"),
    "finite": ("lactate = 2.0", "lactate = nan"),
    "not valid TOML": ("[[level]]", "[[level"),
    "grey": ('reading = "grey"', 'reading = "gray"'),
}


@pytest.mark.parametrize("message", MISTAKES)
def test_mistakes_in_the_table(tmp_path, message):
    (tmp_path / "t.toml").write_text(TABLE.replace(*MISTAKES[message]))
    with pytest.raises(InputError, match=message):
        load_level_table(tmp_path / "t.toml")


def test_bad_images_are_refused_in_one_line(tmp_path):
    path = picture(tmp_path, asymmetric(4, 6))
    (tmp_path / "damaged.png").write_bytes(path.read_bytes()[:40])
    (tmp_path / "damaged.tif").write_bytes(b"II*\0rubbish")
    (tmp_path / "damaged.nii").write_bytes(b"rubbish")
    tifffile.imwrite(tmp_path / "nan.tif", np.full((4, 6), np.nan, np.float32))
    tifffile.imwrite(tmp_path / "stack.tif", np.ones((3, 4, 6), np.uint8), photometric="minisblack")
    make = specimen_from_image
    trials = [
        ("no pixel size", lambda: make(path, GREY, GRID)),
        ("positive", lambda: make(path, GREY, GRID, pixel_um=0.0)),
        ("positive", lambda: make(path, GREY, GRID, pixel_um=float("nan"))),
        ("4 numbers", lambda: make(path, GREY, GRID, pixel_um=(1.0, 1.0, 1.0, 1.0))),
        ("cannot be read", lambda: make(tmp_path / "none.png", GREY, GRID, pixel_um=1.0)),
        ("cannot be read", lambda: make(tmp_path / "damaged.png", GREY, GRID, pixel_um=1.0)),
        ("cannot be read", lambda: make(tmp_path / "damaged.tif", GREY, GRID, pixel_um=1.0)),
        ("cannot be read", lambda: make(tmp_path / "damaged.nii", GREY, GRID, pixel_um=1.0)),
        ("not finite", lambda: make(tmp_path / "nan.tif", GREY, GRID, pixel_um=1.0)),
        ("spacing", lambda: make(tmp_path / "stack.tif", GREY, GRID, pixel_um=(1.0, 1.0))),
        (
            "own depth",
            lambda: make(tmp_path / "stack.tif", GREY, GRID, pixel_um=1.0, depth=FadingSlab()),
        ),
        (
            "nothing on the grid",
            lambda: make(path, GREY, GRID, pixel_um=1.0, placement=Corner(x_um=900)),
        ),
    ]
    for message, trial in trials:
        with pytest.raises(InputError, match=message) as caught:
            trial()
        assert "\n" not in str(caught.value)
