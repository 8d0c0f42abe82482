"""Every verb as a user runs it; every mistake as one line, exit code 2, nothing half-written."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import h5py
import nibabel
import numpy as np
import pytest
from PIL import Image

from recon.cli import main
from recon.record import Record
from recon.result import SpeciesMaps, load_result
from tests import descriptions

INSTRUMENT_TOML = descriptions.INSTRUMENT_TOML.replace(
    "[1000.0, 1000.0, 500.0]", "[4000.0, 4000.0, 500.0]"
)
SPECIES = """
[[species]]
name = "lactate"
shift_ppm = 1.33
equivalent_nuclei = 3
t2_star_ms = 120.0
t1_s = 1.5
diffusion_um2_per_ms = 0.2
polarisation = 0.05
"""
LEVELS = (
    'reading = "grey"\n'
    + SPECIES
    + """
[[level]]
level = 0
concentration_mM = { lactate = 0.0 }
[[level]]
level = 255
concentration_mM = { lactate = 40.0 }
"""
)


def run(*arguments: object) -> int:
    """The exit code of the command."""
    try:
        main([str(argument) for argument in arguments])
    except SystemExit as leaving:
        return int(leaving.code or 0)
    return 0


@pytest.fixture
def folder(tmp_path, monkeypatch) -> Path:
    """A working folder with instrument, image and level table."""
    monkeypatch.chdir(tmp_path)
    Path("instrument.toml").write_text(INSTRUMENT_TOML)
    Path("levels.toml").write_text(LEVELS)
    picture = np.zeros((16, 32), np.uint8)
    picture[4:12, 8:20] = 200
    Image.fromarray(picture).save("image.png")
    return tmp_path


def make_specimen() -> int:
    return run(
        *("specimen", "from-image", "image.png", "levels.toml", "--pixel-um", 1),
        *("--shape", 2, 4, 8, "--voxel-um", 4, 4, 4, "--refinement", 1, 2, 2),
    )


def make_protocol(*more: object) -> int:
    return run(
        *("protocol", "specimen.toml", "instrument.toml", "--shots", 16, "--samples", 4),
        *("--sample-interval-ms", 4, *more),
    )


@pytest.fixture
def measured(folder) -> Path:
    """The folder with specimen, protocol and record."""
    assert make_specimen() == 0
    assert make_protocol() == 0
    assert run("simulate", "specimen.toml", "instrument.toml", "protocol.h5") == 0
    return folder


def test_the_whole_job(measured, capsys):
    assert run("reconstruct", "record.h5", "--replicas", 4) == 0
    assert run("reconstruct", "record.h5", "--cube", "--replicas", 4, "-o", "cube.h5") == 0
    assert run("reconstruct", "record.h5", "--prior", "ridge", "-o", "ridge.h5") == 0
    maps = load_result("result.h5")
    assert isinstance(maps, SpeciesMaps)
    assert maps.values.shape == (1, 2, 4, 8)
    capsys.readouterr()
    for name in ("instrument.toml", "specimen.toml", "protocol.h5", "record.h5"):
        assert run("show", name) == 0
    for name in ("result.h5", "cube.h5", "ridge.h5"):
        assert run("show", name) == 0
    out = capsys.readouterr().out
    assert "16 shots" in out
    assert "lactate: mean" in out
    assert "ppm at zero frequency" in out
    assert "assum" in out.lower()  # what the image's levels hold is an assumption


MISTAKES = [
    ("missing field", "depth_um = 0.1\n", "", r"depth_um.*missing"),
    ("misspelt field", "depth_um = 0.1", "depht_um = 0.1", r"depht_um.*depth_um"),
    ("wrong unit", "depth_um = 0.1", "depth_nm = 100.0", r"depth_nm"),
    ("negative thickness", "thickness_um = 5.0", "thickness_um = -5.0", r"thickness_um"),
    ("not a number", "depth_um = 0.1", 'depth_um = "thin"', r"depth_um"),
    ("nan", "depth_um = 0.1", "depth_um = nan", r"depth_um"),
]


@pytest.mark.parametrize("old, new, says", [m[1:] for m in MISTAKES], ids=[m[0] for m in MISTAKES])
def test_mistakes_in_the_instrument(folder, capsys, old, new, says):
    assert make_specimen() == 0
    Path("instrument.toml").write_text(INSTRUMENT_TOML.replace(old, new))
    before = sorted(os.listdir())
    assert make_protocol() == 2
    error = capsys.readouterr().err
    assert re.search(says, error), error
    assert "Traceback" not in error
    assert all(line.startswith("nearspin: ") for line in error.splitlines())
    assert sorted(os.listdir()) == before


def refused(capsys, says: str, *arguments: object) -> None:
    """The verb leaves with 2, one line that says it, and the folder as it was."""
    before = {name: Path(name).stat().st_mtime_ns for name in os.listdir()}
    assert run(*arguments) == 2
    error = capsys.readouterr().err
    assert re.search(says, error), error
    assert len(error.strip().splitlines()) == 1
    assert {name: Path(name).stat().st_mtime_ns for name in os.listdir()} == before


def test_anticrossing_is_a_warning(folder, capsys):
    assert make_specimen() == 0
    text = INSTRUMENT_TOML.replace("[0.0, 0.0, 85.0]", "[0.0, 0.0, 102.4]")
    Path("instrument.toml").write_text(text)
    assert make_protocol() == 0
    assert "warning" in capsys.readouterr().err


def test_mistakes_in_the_protocol(folder, capsys):
    assert make_specimen() == 0
    capsys.readouterr()
    refused(capsys, "sensing axes", *protocol_command(), "--axis", 5)
    weak = INSTRUMENT_TOML.replace("[4000.0, 4000.0, 500.0]", "[1.0, 1.0, 1.0]")
    Path("instrument.toml").write_text(weak)
    refused(capsys, "wavevector.*limit|reach", *protocol_command())


def protocol_command() -> tuple[object, ...]:
    return ("protocol", "specimen.toml", "instrument.toml", "--shots", 16, "-o", "new.h5")


def test_image_without_pixel_size(folder, capsys):
    refused(capsys, "pixel", "specimen", "from-image", "image.png", "levels.toml", "-o", "x.toml")


def test_species_without_a_map(measured, capsys):
    text = Path("specimen.toml").read_text()
    Path("specimen.toml").write_text(text + SPECIES.replace("lactate", "alanine"))
    command = ("simulate", "specimen.toml", "instrument.toml", "protocol.h5", "-o", "new.h5")
    refused(capsys, "'alanine' has no map", *command)


def test_damaged_records(measured, capsys):
    good = Path("record.h5").read_bytes()
    Path("short.h5").write_bytes(good[: len(good) // 2])
    refused(capsys, "truncated|damaged|cannot be read", "reconstruct", "short.h5", "-o", "new.h5")
    Path("text.h5").write_text("not HDF5")
    refused(capsys, "not an HDF5 file", "reconstruct", "text.h5", "-o", "new.h5")
    refused(capsys, "does not exist", "reconstruct", "none.h5", "-o", "new.h5")
    refused(capsys, "holds a protocol", "reconstruct", "protocol.h5", "-o", "new.h5")


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_bad_samples(measured, capsys, bad):
    record = Record.open("record.h5")
    samples = record.samples_in_memory().copy()
    samples[3, 1, 2, 2] = bad
    with h5py.File("record.h5", "r+") as file:
        file["samples"][...] = samples
    refused(capsys, r"NaN or infinite.*|shot 3", "reconstruct", "record.h5", "-o", "new.h5")


def test_protocol_of_another_length(measured, capsys):
    assert make_protocol("--seed", 3, "-o", "other.h5") == 0
    with h5py.File("record.h5", "r+") as file, h5py.File("other.h5") as other:
        del file["protocol/averages"]
        file["protocol"].create_dataset("averages", data=other["averages"][:7])
    capsys.readouterr()
    refused(capsys, "shots|averages", "reconstruct", "record.h5", "-o", "new.h5")


def test_folder_that_cannot_be_written(measured, capsys):
    Path("file").write_text("")
    refused(capsys, "cannot write", "reconstruct", "record.h5", "-o", "file/result.h5")


def test_full_disk(measured, capsys):
    """/dev/full stands for a disk without room; the existing result is untouched."""
    assert run("reconstruct", "record.h5", "--replicas", 0) == 0
    before = Path("result.h5").read_bytes()
    program = (
        "import resource, sys; resource.setrlimit(resource.RLIMIT_FSIZE, (2000, 2000));"
        "import signal; signal.signal(signal.SIGXFSZ, signal.SIG_IGN);"
        "from recon.cli import main; main(['reconstruct', 'record.h5', '--replicas', '0'])"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True)
    assert done.returncode == 2
    assert "cannot write" in done.stderr
    assert "Traceback" not in done.stderr
    assert Path("result.h5").read_bytes() == before
    assert not [name for name in os.listdir() if name.startswith(".partial")]


def test_interruption_leaves_nothing(measured):
    program = (
        "import recon.cli.reconstruct as verb\n"
        "def stop(*_, **__): raise KeyboardInterrupt\n"
        "verb.reconstruct = stop\n"
        "from recon.cli import main; main(['reconstruct', 'record.h5', '-o', 'new.h5'])"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True)
    assert done.returncode == 130
    assert "interrupted" in done.stderr
    assert not Path("new.h5").exists()


@pytest.mark.parametrize("arguments", [("--help",), ("demo", "--help"), ("--version",)])
def test_help(arguments, capsys):
    assert run(*arguments) == 0
    assert capsys.readouterr().out


def test_unknown_verb(capsys):
    assert run("frobnicate") == 2
    assert "No such command" in capsys.readouterr().err


def test_nifti_is_read_by_other_programs(measured):
    """A map handed over has the same values and affine in nibabel."""
    assert run("reconstruct", "record.h5", "--replicas", 0) == 0
    from recon.handover import nifti

    maps = load_result("result.h5")
    written = nifti.write_map("lactate.nii.gz", maps.values[0], maps.grid, "lactate", "mM")
    image = nibabel.load(written[0])
    np.testing.assert_array_equal(np.asarray(image.dataobj).T, maps.values[0])
    np.testing.assert_allclose(image.affine, nifti.affine(maps.grid), atol=1e-9)
