"""A small counted experiment: 16 × 16 channels, two lines, every kind of flaw."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from recon.counts import Acquisition, CountsRecord, Tone
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.tables import VariableDensity
from recon.protocol import Protocol
from recon.simulate.counts import Truth, simulate_counts
from recon.simulate.imperfections import Imperfections
from recon.specimen import Species, Specimen
from tests.cases import instrument as small_instrument

MICRON = 1e-6
GRID = Grid((2, 16, 16), (4 * MICRON,) * 3, base_height=0.5 * MICRON)
FRAMES, SAMPLES, DWELL = 16, 12, 8e-3


def instrument(photons: float = 1e6, kind: str = "camera") -> Instrument:
    """A layer read by a camera with a pixel per voxel, or by one detector."""
    return small_instrument(
        kind,
        GRID,
        readout={
            "photons_per_readout": photons,
            "contrast": 0.1,
            "sensing_time_us": 10.0,
            "efficiency": 0.6,
            "readouts_per_sample": 64,
        },
        bias_field_mT=(0.0, 0.0, 90.0),
        sensor_layer={"depth_um": 0.3, "thickness_um": 1.0, "crystal_cut": "111"},
    )


def specimen() -> Specimen:
    """Water with structure and a weaker, narrow line; uniform voxels, so that the model is exact
    but for what the grid neglects.
    """
    rng = np.random.default_rng(3)
    maps = 1e4 * (0.5 + rng.random((2, *GRID.shape), np.float32))
    maps[1] *= 0.2
    common = {"equivalent_nuclei": 2, "t1_s": 1.5, "polarisation": 1e-3}
    lines = (
        Species(name="water", shift_ppm=4.7, t2_star_ms=60.0, diffusion_um2_per_ms=2.0, **common),
        Species(name="fat", shift_ppm=1.3, t2_star_ms=80.0, diffusion_um2_per_ms=0.02, **common),
    )
    return Specimen(GRID, lines, maps, (1, 1, 1), "invented")


def protocol(shots: int = 24, seed: int = 0) -> Protocol:
    """Variable-density shots, 2 s apart."""
    return VariableDensity(shots=shots, seed=seed).protocol(GRID, np.arange(SAMPLES) * DWELL)


def acquisition(apparatus: Instrument, **changes: object) -> Acquisition:
    """Frames that fold the carrier to a quarter of their rate; a tone of 30 nT; mains."""
    carrier = apparatus.larmor_frequency
    interval = (round(carrier * 125e-6 - 0.25) + 0.25) / carrier
    fields = {
        "frame_interval_us": interval * 1e6,
        "frames_per_window": FRAMES,
        "photons_per_count": 400.0,
        "count_offset": 200.0,
        "mains_Hz": 50.0,
        "tone": Tone(amplitude_nT=30.0, offset_Hz=700.0),
    }
    return Acquisition(**(fields | changes))


def counted(
    path: Path,
    flaws: Imperfections | None = None,
    *,
    seed: int = 0,
    shots: int = 24,
    photons: float = 1e6,
    kind: str = "camera",
    **changes: object,
) -> tuple[CountsRecord, Truth]:
    """A record of counts and what was wrong with it."""
    apparatus = instrument(photons, kind)
    return simulate_counts(
        specimen(),
        apparatus,
        protocol(shots),
        acquisition(apparatus, **changes),
        path,
        flaws=flaws,
        seed=seed,
        compression=None,
    )
