"""A small described experiment for the tests of descriptions and files."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from recon.errors import InputError
from recon.grid import Grid
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.specimen import Species, Specimen

INSTRUMENT_TOML = """
temperature_C = 25.0
bias_field_mT = [0.0, 0.0, 85.0]

[sensor_layer]
depth_um = 0.1
thickness_um = 5.0
crystal_cut = "111"

[optics]
numerical_aperture = 0.8
wavelength_nm = 700.0

[camera]
pixel_um = 4.0
field_of_view_um = [32.0, 16.0]

[gradients]
nuclear_strength_mT_per_m = [1000.0, 1000.0, 500.0]
nuclear_pulse_max_ms = 2.0
sensor_strength_mT_per_m = 1000.0
sensor_pulse_max_us = 5.0

[readout]
photons_per_readout = 1e6
contrast = 0.02
sensing_time_us = 20.0
efficiency = 0.5
readouts_per_sample = 100
"""
GRID = Grid((2, 4, 8), (4e-6, 4e-6, 4e-6), base_height=1e-6)


def instrument_file(folder: Path, old: str = "", new: str = "") -> Path:
    """The instrument's TOML file with one passage changed."""
    assert old in INSTRUMENT_TOML
    path = folder / "instrument.toml"
    path.write_text(INSTRUMENT_TOML.replace(old, new, 1))
    return path


def instrument(folder: Path) -> Instrument:
    return Instrument.from_toml(instrument_file(folder))


def species(name: str = "lactate", **changes: object) -> Species:
    fields = {
        "name": name,
        "shift_ppm": 1.33,
        "equivalent_nuclei": 3,
        "t2_star_ms": 120.0,
        "t1_s": 1.5,
        "diffusion_um2_per_ms": 0.2,
    }
    return Species(**(fields | changes))


def specimen(refinement: tuple[int, int, int] = (1, 2, 3)) -> Specimen:
    fine = [n * r for n, r in zip(GRID.shape, refinement, strict=True)]
    maps = np.random.default_rng(0).random((2, *fine), np.float32)
    lines = (species(), species("water", shift_ppm=4.7, polarisation=0.01))
    return Specimen(GRID, lines, maps, refinement, "invented")


def protocol(shots: int = 6, times: int = 3) -> Protocol:
    rng = np.random.default_rng(1)
    return Protocol(
        nuclear_wavevector=rng.uniform(-2e5, 2e5, (shots, 3)),
        sensor_wavevector=rng.uniform(-2e5, 2e5, (shots, 2)),
        sensing_axis=rng.integers(1, 5, shots),
        amplitude=rng.standard_normal(shots) + 1j,
        averages=rng.integers(1, 9, shots),
        clock_time=np.arange(shots) * 0.5,
        sample_times=np.arange(times) * 1e-3,
    )


def line(*arguments: object, of: object) -> str:
    """The one line an `InputError` says when `of` is called."""
    with pytest.raises(InputError) as caught:
        of(*arguments)  # type: ignore[operator]
    text = str(caught.value)
    assert "\n" not in text
    return text


def run_with_file_limit(limit: int, code: str, folder: Path) -> subprocess.CompletedProcess[str]:
    """Run Python code in `folder` where no file may grow beyond `limit` bytes: a full disk."""
    lead = (
        "import resource, signal; signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        f"resource.setrlimit(resource.RLIMIT_FSIZE, ({limit}, {limit}))\n"
    )
    root = Path(__file__).parent.parent
    return subprocess.run(
        [sys.executable, "-B", "-c", lead + code],
        cwd=folder,
        env=os.environ | {"PYTHONPATH": f"{root}", "OMP_NUM_THREADS": "1"},
        capture_output=True,
        text=True,
        check=False,
    )
