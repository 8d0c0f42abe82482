"""The dataset against the standards' own validators, two general readers, and our own checks."""

from __future__ import annotations

import gzip
import json
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import nibabel
import numpy as np
import pytest
import SimpleITK
from nifti_mrs.nifti_mrs import NIFTI_MRS
from nifti_mrs.validator import validate_nifti_mrs
from PIL import Image

from recon.cli import main
from recon.cli.hand_over import columns
from recon.errors import InputError, InputWarning
from recon.grid import Grid
from recon.handover.dataset import Delivery, Subject, entity
from recon.handover.labels import Labels, Readability, readability
from recon.handover.micrograph import on_grid
from recon.handover.placement import Placement
from recon.handover.read_back import read_dataset
from tests import results

OBLIQUE = Placement.turned(30.0, (10.0, -20.0, 5.0), "stage")
CUBE_FILE = "sub-01/mrs/sub-01_mrsi.nii.gz"
MAP_FILE = "derivatives/nearspin/sub-01/mrs/sub-01_desc-lactate_mrsmap.nii.gz"


@pytest.fixture(scope="module")
def delivery() -> Delivery:
    picture = np.arange(60, dtype=np.float32).reshape(results.grid().shape)
    return Delivery(results.maps(), results.cube(), OBLIQUE, micrograph=picture)


@pytest.fixture(scope="module")
def dataset(delivery, tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("handed") / "dataset"
    delivery.write(folder)
    return folder


def images(folder: Path) -> list[Path]:
    return sorted(folder.rglob("*.nii.gz"))


def test_the_format_librarys_validator_accepts_the_cube(dataset):
    cube = NIFTI_MRS(str(dataset / CUBE_FILE))
    validate_nifti_mrs(cube)
    assert cube.dwelltime == pytest.approx(2e-3)
    assert cube.spectrometer_frequency[0] == pytest.approx(results.LARMOR * 1e-6)
    assert cube.nucleus == ["1H"]


def test_a_line_lies_where_the_standard_puts_it(dataset):
    """ν = −(δ − δ_ref)·SF in the stored signal's own Fourier transform: sign and time domain."""
    cube = NIFTI_MRS(str(dataset / CUBE_FILE))
    signal = np.asarray(nibabel.load(dataset / CUBE_FILE).dataobj)[2, 1, 0]
    spectrum = np.fft.fft(signal, 4096)
    frequency = np.fft.fftfreq(4096, cube.dwelltime)
    peak = frequency[np.abs(spectrum).argmax()]
    expected = -(results.SHIFT - results.REFERENCE) * cube.spectrometer_frequency[0]
    assert peak == pytest.approx(expected, abs=0.3)
    assert np.abs(signal[0]) == np.abs(signal).max()  # decays: time domain, not frequency


def test_spectrum_ascends_and_peaks_at_the_line(dataset):
    path = dataset / MAP_FILE.replace("lactate", "spectrum")
    image = nibabel.load(path)
    step, first = image.header["pixdim"][4], float(image.header["toffset"])
    assert step > 0
    ppm = first + step * np.arange(image.shape[3])
    peak = ppm[np.asarray(image.dataobj)[2, 1, 0].argmax()]
    assert abs(peak - results.SHIFT) <= step


def test_every_file_has_the_same_affine_and_is_finite(dataset):
    found = [nibabel.load(path) for path in images(dataset)]
    assert len(found) > 10
    for image in found:
        header = image.header
        assert image.get_data_dtype() in (np.float32, np.uint8, np.complex64)
        assert header["qform_code"] == header["sform_code"] == 1
        assert header["xyzt_units"] & 7 == 2  # millimetres
        assert header.get_sform().tobytes() == found[0].header.get_sform().tobytes()
        for name in ("quatern_b", "quatern_c", "quatern_d", "qoffset_x", "qoffset_y", "qoffset_z"):
            assert header[name].tobytes() == found[0].header[name].tobytes()
        assert np.isfinite(np.asarray(image.dataobj)).all()


@pytest.mark.parametrize("edge", [0.1, 0.7, 4.0, 20.0])
@pytest.mark.parametrize("placement", [Placement(), OBLIQUE], ids=["aligned", "oblique"])
def test_points_agree_between_readers(tmp_path, edge, placement):
    """nibabel, SimpleITK and the definition: the same voxel at the same place to 1e-3 voxel."""
    grid = results.grid((edge, edge, 1.7 * edge))
    Delivery(results.maps(grid), results.cube(grid), placement).write(tmp_path / "d")
    turn, shift = np.array(placement.rotation), np.array(placement.shift_um)
    for path in images(tmp_path / "d"):
        image = SimpleITK.ReadImage(str(path))
        index = (4, 2, 1) + ((0,) if image.GetDimension() == 4 else ())
        point = np.array(image.TransformIndexToPhysicalPoint(index))[:3]
        point[:2] *= -1  # that reader counts towards left and posterior
        local = np.array([4 * 1.7 * edge, 2 * edge, 1.0 + 1.5 * edge])
        expected = (turn @ local + shift) * 1e-3
        assert np.abs(point - expected).max() <= 1e-3 * edge * 1e-3
        by_nibabel = (nibabel.load(path).affine @ [4, 2, 1, 1])[:3]
        assert np.abs(by_nibabel - expected).max() <= 1e-3 * edge * 1e-3


def test_orientation_with_an_asymmetric_object(dataset):
    """File index (x, y, z) holds value 100 z + 10 y + x."""
    data = np.asarray(nibabel.load(dataset / MAP_FILE).dataobj)
    assert data.shape == (5, 4, 3)
    assert data[4, 2, 1] == 124


def test_bids_validator_accepts_it_and_rejects_broken_copies(dataset, tmp_path):
    def judge(folder: Path) -> int:
        command = [Path(sys.executable).with_name("bids-validator-deno"), folder]
        return subprocess.run(command, capture_output=True).returncode

    assert judge(dataset) == 0
    for number, harm in enumerate((lose_description, rename_cube, lose_frequency)):
        broken = tmp_path / f"broken{number}"
        shutil.copytree(dataset, broken)
        harm(broken)
        assert judge(broken) != 0, harm.__name__


def lose_description(folder: Path) -> None:
    (folder / "dataset_description.json").unlink()


def rename_cube(folder: Path) -> None:
    (folder / CUBE_FILE).rename(folder / "sub-01/mrs/sub-01_desc-x_mrsi.nii.gz")


def lose_frequency(folder: Path) -> None:
    path = folder / CUBE_FILE.replace(".nii.gz", ".json")
    facts = json.loads(path.read_text())
    del facts["SpectrometerFrequency"]
    path.write_text(json.dumps(facts))


def test_header_tool_says_good(dataset):
    tool = shutil.which("nifti_tool")
    if tool is None:
        pytest.skip("nifti_tool (Debian package nifti-bin) is not installed")
    for path in images(dataset):
        done = subprocess.run(
            [tool, "-check_hdr", "-infiles", str(path)], capture_output=True, text=True
        )
        assert "GOOD" in done.stdout, (path.name, done.stdout)


def test_round_trip_loses_nothing(dataset, delivery):
    for again, before in zip(read_dataset(dataset), (delivery.maps, delivery.cube), strict=True):
        assert again.grid == before.grid
        assert again.account == before.account
        for what in ("values", "standard_error", "resolution"):
            np.testing.assert_array_equal(getattr(again, what), getattr(before, what))
            assert getattr(again, what).dtype == getattr(before, what).dtype
    maps, cube = read_dataset(dataset)
    assert maps.names == delivery.maps.names
    np.testing.assert_array_equal(cube.sample_times, delivery.cube.sample_times)
    assert cube.larmor_frequency == results.LARMOR
    assert cube.reference_shift_ppm == results.REFERENCE


def test_round_trip_of_gaps(tmp_path):
    """NaN in values, errors, widths, weight and misfit is NaN again; the files hold none."""
    maps = results.maps()
    values, error, width = (
        np.array(one) for one in (maps.values, maps.standard_error, maps.resolution)
    )
    values[0, 1, 2, 3] = error[1, 0, 0, 0] = width[0, 2, 1] = np.nan
    account = replace(maps.account, weights={"a": np.nan}, misfit=np.nan)
    before = replace(maps, values=values, standard_error=error, resolution=width, account=account)
    Delivery(before).write(tmp_path / "d")
    for path in images(tmp_path / "d"):
        assert np.isfinite(np.asarray(nibabel.load(path).dataobj)).all()
    for path in (tmp_path / "d").rglob("*.json"):
        json.loads(path.read_text(), parse_constant=pytest.fail)
    again, cube = read_dataset(tmp_path / "d")
    assert cube is None
    for what in ("values", "standard_error", "resolution"):
        np.testing.assert_array_equal(getattr(again, what), getattr(before, what))
    assert np.isnan(again.account.misfit)
    assert np.isnan(again.account.weights["a"])


def test_labels_follow_the_stated_limits():
    labels = readability(results.maps())
    values = results.maps().values
    assert labels[0][values[0] == 31 - 1].tolist() in ([], [Readability.DETECTED])
    assert (labels[0][values[0] > 30] == Readability.QUANTIFIABLE).all()
    assert (labels[1][values[1] < 99] == Readability.BELOW_DETECTION).all()


def test_labels_given_are_written(tmp_path):
    maps = results.maps()
    values = np.full(maps.values.shape, 7, np.uint8)
    Delivery(maps, labels=Labels(values, {7: "out of reach"})).write(tmp_path / "d")
    path = tmp_path / "d" / MAP_FILE.replace("lactate", "lactateLabels")
    assert (np.asarray(nibabel.load(path).dataobj) == 7).all()
    facts = json.loads(path.with_name(path.name.replace(".nii.gz", ".json")).read_text())
    assert facts["Labels"] == {"7": "out of reach"}


def test_a_far_origin_is_doubted():
    """float32 keeps 50 mm to 4 nm: 4 % of a voxel of 0.1 µm."""
    far = Placement(shift_um=(50_000.123, 0.0, 0.0))
    with pytest.warns(InputWarning, match="of a voxel"):
        Delivery(results.maps(results.grid((0.1, 0.1, 0.1))), placement=far)


def renamed(*names: str) -> Delivery:
    return Delivery(replace(results.maps(), names=names))


def test_sidecars_carry_what_a_reader_needs(dataset):
    facts = json.loads((dataset / MAP_FILE.replace(".nii.gz", ".json")).read_text())
    assert facts["QuantityUnit"] == "mM"
    assert facts["VoxelSize_um"] == {"x": 3.0, "y": 2.0, "z": 4.0}
    assert facts["Provenance"]["protocol_sha256"] == "abc"
    assert facts["Frame"] == "stage"
    assert "not for diagnosis" in facts["Caution"]
    assert "not for diagnosis" in (dataset / "README").read_text()


def test_participants_only_if_given(dataset, tmp_path):
    assert not (dataset / "participants.tsv").exists()
    subject = Subject("A7", {"species": "invented"})
    Delivery(results.maps(), subject=subject).write(tmp_path / "d")
    assert (tmp_path / "d/participants.tsv").read_text() == (
        "participant_id\tspecies\nsub-A7\tinvented\n"
    )


def test_existing_folder_is_kept_unless_replaced(tmp_path):
    folder = tmp_path / "d"
    folder.mkdir()
    (folder / "mine.txt").write_text("kept")
    with pytest.raises(InputError, match="exists already"):
        Delivery(results.maps()).write(folder)
    assert (folder / "mine.txt").exists()
    Delivery(results.maps()).write(folder, replace=True)
    assert not (folder / "mine.txt").exists()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["d"]


KILLING = """
import os, random, signal, sys, time
from pathlib import Path
from recon.handover.dataset import Delivery
from tests import results
delivery, folder = Delivery(results.maps(), results.cube()), Path(sys.argv[1])
begin = time.perf_counter()
delivery.write(folder / "whole")
taken, chance = time.perf_counter() - begin, random.Random(0)
for number in range(30):
    child = os.fork()
    if child == 0:
        delivery.write(folder / f"d{number}")
        os._exit(0)
    if 0 < number < 28:
        time.sleep(chance.uniform(0, 1.5 * taken))
    if number < 28:
        os.kill(child, signal.SIGKILL)
    os.waitpid(child, 0)
"""


def test_killed_at_any_moment_nothing_looks_whole(tmp_path):
    """Writers killed at random moments of their work: the target is absent or complete.

    One of thirty is killed at once, the last two never, the rest anywhere in between.
    """
    root = Path(__file__).parent.parent
    subprocess.run([sys.executable, "-c", KILLING, str(tmp_path)], cwd=root, check=True)
    complete = contents(tmp_path / "whole")
    reached = [tmp_path / f"d{number}" for number in range(30)]
    for target in reached:
        if target.exists():
            assert contents(target) == complete
    assert not reached[0].exists()
    assert reached[-1].exists()
    assert all(one.name.startswith((".partial-", "d", "whole")) for one in tmp_path.iterdir())


def contents(folder: Path) -> dict[str, bytes]:
    """Every file's bytes; compressed ones unpacked, since their header holds the time."""
    return {
        str(path.relative_to(folder)): gzip.decompress(path.read_bytes())
        if path.suffix == ".gz"
        else path.read_bytes()
        for path in folder.rglob("*")
        if path.is_file()
    }


def test_micrograph_on_the_grid(tmp_path):
    """Area means, centred: a picture that is dark on the left stays so in every plane."""
    levels = np.zeros((40, 60), np.uint8)
    levels[:, 30:] = 200
    Image.fromarray(levels).save(tmp_path / "p.png")
    grid = Grid((2, 8, 10), (1e-6,) * 3)
    plane = on_grid(tmp_path / "p.png", grid, 0.2)
    assert plane.shape == grid.shape
    assert np.isfinite(plane).all()
    assert plane[0, 4, 2] == 0
    assert plane[1, 4, 7] == 200


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: Placement.from_matrix(np.eye(3)), "4 x 4"),
        (lambda: Placement.from_matrix(np.diag([1.0, 1.0, -1.0, 1.0])), "no rotation"),
        (lambda: Placement.from_matrix(np.diag([1.0, 2.0, 1.0, 1.0])), "no rotation"),
        (lambda: Delivery(), "neither"),
        (lambda: Subject("a/b"), "letters and digits"),
        (lambda: entity("···"), "no letters"),
        (lambda: renamed("a-b", "a b"), "shares a file name"),
        (lambda: renamed("lactate", "lactate error"), "shares a file name"),
        (lambda: renamed("spectrum", "water"), "shares a file name"),
        (lambda: Labels(np.uint8([3]), {1: "fine"}), "no meaning"),
        (lambda: columns(("age",)), "no COLUMN=VALUE"),
        (lambda: read_dataset("/nonexistent"), "no dataset"),
    ],
)
def test_refusals_are_one_line(make, says):
    with pytest.raises(InputError, match=says) as caught:
        make()
    assert "\n" not in str(caught.value)


def test_verb(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    results.maps().save("maps.h5")
    results.cube().save("cube.h5")
    Path("stage.toml").write_text(
        'frame = "stage"\nmatrix_um = [[0,-1,0,5],[1,0,0,6],[0,0,1,7],[0,0,0,1]]\n'
    )
    main(["hand-over", "maps.h5", "cube.h5", "--placement", "stage.toml", "-o", "out",
          "--participant", "sample=invented"])  # fmt: skip
    assert Path("out/participants.tsv").read_text().endswith("sub-01\tinvented\n")
    assert "sub-01_mrsi.nii.gz" in capsys.readouterr().out
    affine = nibabel.load(Path("out") / CUBE_FILE).affine
    np.testing.assert_allclose(affine[:3, 3], [5e-3, 6e-3, 7e-3 + 3e-3], atol=1e-9)
    for wrong in (["maps.h5", "maps.h5"], ["maps.h5", "--placement", "none.toml"]):
        with pytest.raises(SystemExit) as leaving:
            main(["hand-over", *wrong, "-o", "other"])
        assert leaving.value.code == 2
        assert len(capsys.readouterr().err.splitlines()) == 1
        assert not Path("other").exists()
