"""What imperfections cost, and how much of it the program's own calibration wins back.

    python bench/calibration.py --json [--quick]

The invented muscle section, counted with every imperfection at its typical size and a sensor layer
half a micrometre deeper than described, then converted, calibrated and reconstructed without any
help; against the same photons without imperfections. Then one imperfection at a time on a smaller
section: ignored, modelled with the truth, modelled with the estimate. Reading and converting are
timed side by side on the compressed record and on a plain one.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
import tempfile
import time
import warnings
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from common import emit, side_by_side, table

from recon import demo
from recon.calibrate.calibration import Calibrated, Calibration, calibrate
from recon.calibrate.geometry import Geometry
from recon.counts import Acquisition, CountsRecord, CountsWriter, Tone, convert
from recon.counts.conversion import Conversion, Settings
from recon.errors import InputWarning
from recon.instrument import Instrument
from recon.planning.tables import VariableDensity
from recon.priors import NonNegative, TotalVariation
from recon.protocol import Protocol, SpectralAxis
from recon.reconstruct import Reality, reconstruct
from recon.record import Record
from recon.simulate.counts import Truth, simulate_counts
from recon.simulate.imperfections import Imperfections
from recon.solvers.penalised import Penalised
from recon.specimen import Specimen
from recon.specimens.muscle import Muscle, MuscleSize

DEEPER_UM = 0.5
FRAMES = 16


@dataclass(frozen=True)
class Bench:
    """One experiment: what it is, and what is said of it."""

    specimen: Specimen
    true: Instrument
    described: Instrument
    protocol: Protocol
    acquisition: Acquisition


def bench(size: MuscleSize, shots: int, deeper_um: float) -> Bench:
    """The muscle section of a size; the layer is deeper than described."""
    specimen = Muscle(size).specimen()
    _, ny, nx = size.shape
    view = (nx * size.voxel_um[2], ny * size.voxel_um[1])
    described = demo.instrument()
    camera = described.camera.model_copy(update={"field_of_view_um": view})
    described = described.model_copy(update={"camera": camera})
    layer = described.sensor_layer
    deeper = layer.model_copy(update={"depth_um": layer.depth_um + deeper_um})
    protocol = VariableDensity(shots=shots).protocol(
        specimen.grid,
        np.arange(demo.SAMPLES) * demo.INTERVAL,
        spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE,
    )
    carrier = described.larmor_frequency
    interval = (round(carrier * 125e-6 - 0.25) + 0.25) / carrier
    acquisition = Acquisition(
        frame_interval_us=interval * 1e6,
        frames_per_window=FRAMES,
        photons_per_count=200.0,
        count_offset=300.0,
        read_noise_photons=300.0,
        mains_Hz=50.0,
        tone=Tone(amplitude_nT=20.0, offset_Hz=700.0),
    )
    true = described.model_copy(update={"sensor_layer": deeper})
    return Bench(specimen, true, described, protocol, acquisition)


@dataclass(eq=False)
class ConstantLight:
    """A reference that is looked at once and then trusted for ever: what ignoring it means."""

    first: np.ndarray | None = None

    def divide(self, signal: np.ndarray, reference: np.ndarray, windows: int) -> None:
        """Nothing is divided."""

    def left(self, level: np.ndarray) -> np.ndarray:
        """The light of the first row."""
        if self.first is None:
            self.first = np.where(level > 1, level, 1e30).astype(np.float32)
        return self.first


def counted(one: Bench, flaws: Imperfections, path: Path, seed: int = 0):
    """Counts with the described instrument written beside them, and the truth."""
    path.unlink(missing_ok=True)
    counts, truth = simulate_counts(
        one.specimen,
        one.true,
        one.protocol,
        one.acquisition,
        path,
        flaws=flaws,
        seed=seed,
        compression=None,
    )
    return replace(counts, instrument=one.described), truth


def ignored(counts: CountsRecord) -> Record:
    """As described, without a second look."""
    settings = Settings(ConstantLight(), tone=False, mains=False, common_noise=False)
    return replace(convert(counts, settings=settings).record, channel_weight=None)


def with_truth(one: Bench, counts: CountsRecord, truth: Truth) -> Record:
    """Everything put right by what was really wrong."""
    record = convert(counts, settings=Settings(tone=False)).record
    channels, times = truth.channels, record.protocol.sample_times
    response = np.where(channels.dead | channels.saturated, 1, np.exp(-1j * channels.phase))
    turn = np.exp(
        1j * (truth.jitter_rad[:, None] + 2 * np.pi * truth.frequency_Hz[:, None] * times)
    )
    samples = record.samples_in_memory() / response * turn[:, :, None, None]
    protocol = replace(record.protocol, amplitude=record.protocol.amplitude * truth.polarisation)
    return replace(
        record, source=samples.astype(np.complex64), protocol=protocol, instrument=one.true
    )


def calibrated(counts: CountsRecord, geometry: bool) -> tuple[Conversion, Calibrated]:
    """By the program alone."""
    done = convert(counts)
    wanted = Geometry(gradients=()) if geometry else None
    return done, calibrate(done.record, settings=Calibration(geometry=wanted))


def error(specimen: Specimen, record: Record) -> float:
    """Mean over the species of the relative error of their amounts."""
    estimator = Penalised((TotalVariation(), NonNegative()), replicas=None, resolution=None)
    maps = reconstruct(record, None, estimator, reality=Reality.of(record))
    truth = specimen.concentrations
    off = np.sqrt(((maps.values - truth) ** 2).mean(axis=(1, 2, 3)))
    return float(np.mean(off / np.sqrt((truth**2).mean(axis=(1, 2, 3)))))


ONE_AT_A_TIME = {
    "laser noise, drift, bleaching": ("laser_noise", "laser_drift", "bleaching"),
    "vignetting": ("vignetting",),
    "contrast and phase of channels": ("contrast_spread", "phase_spread_rad"),
    "hot, dead, saturated pixels": ("hot_share", "dead_share", "saturated_share"),
    "mains pickup": ("pickup", "mains_offset_Hz"),
    "field drift": ("field_drift_Hz", "field_walk_Hz"),
    "timing jitter": ("timing_jitter_rad",),
    "common field noise": ("common_field_noise",),
    "polarisation decay": ("polarisation_decay",),
}


def singles(folder: Path) -> dict[str, list[float]]:
    """Error over that of the ideal record: ignored, truth, estimate."""
    plain = bench(MuscleSize((4, 32, 32)), 40, 0.0)
    typical, none = Imperfections.typical(), Imperfections()
    ideal = error(plain.specimen, convert(counted(plain, none, folder / "i.h5")[0]).record)
    ratios = {}
    for name, fields in ONE_AT_A_TIME.items():
        flaws = replace(none, **{field: getattr(typical, field) for field in fields})
        ratios[name] = _three(plain, flaws, folder, ideal, geometry=False)
    deeper = bench(MuscleSize((4, 32, 32)), 40, DEEPER_UM)
    deep = error(
        deeper.specimen,
        replace(convert(counted(deeper, none, folder / "i.h5")[0]).record, instrument=deeper.true),
    )
    name = f"layer {DEEPER_UM:g} um deeper than described"
    ratios[name] = _three(deeper, none, folder, deep, geometry=True)
    return ratios


def _three(
    one: Bench, flaws: Imperfections, folder: Path, ideal: float, geometry: bool
) -> list[float]:
    counts, truth = counted(one, flaws, folder / "c.h5")
    records = (
        ignored(counts),
        with_truth(one, counts, truth),
        calibrated(counts, geometry)[1].record,
    )
    return [error(one.specimen, record) / ideal for record in records]


def speed(counts: CountsRecord, folder: Path) -> dict[str, tuple[float, float]]:
    """Speed of converting over that of reading, compressed and plain, with standard errors."""
    ratios = {}
    for name, compression in (("compressed", 1), ("plain", None)):
        path = folder / f"{name}.h5"
        with CountsWriter(
            path,
            counts.instrument,
            counts.protocol,
            counts.acquisition,
            counts.description_json,
            compression=compression,
        ) as writer:
            for row in range(len(counts)):
                writer.append(int(counts.shot[row]), float(row), *counts.row(row))
        record = CountsRecord.open(path)

        def read(record: CountsRecord = record) -> None:
            for _ in record.rows():
                pass

        timing = side_by_side(
            {
                "read": read,
                "convert": lambda record=record: convert(record, folder / "r.h5"),
            },
            repeats=3,
        )
        ratios[name] = timing["read"].over(timing["convert"])
        path.unlink()
    return ratios


def main() -> None:
    """Run and print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", action="store_true", help="the last line is JSON in any case")
    parser.add_argument("--quick", action="store_true", help="without the table of single flaws")
    arguments = parser.parse_args()
    warnings.simplefilter("ignore", InputWarning)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        figures = whole(folder)
        if not arguments.quick:
            ratios = singles(folder)
            rows = [[name, *(f"{ratio:.3f}" for ratio in three)] for name, three in ratios.items()]
            table(rows, ["error over ideal", "ignored", "truth", "estimate"])
            figures["one_at_a_time"] = ratios
    emit(figures)


def whole(folder: Path) -> dict[str, object]:
    """Everything at once on the full section."""
    one = bench(MuscleSize((6, 64, 64)), demo.SHOTS, DEEPER_UM)
    begin = time.perf_counter()
    clean, _ = counted(one, Imperfections(), folder / "clean.h5")
    ideal_record = replace(convert(clean).record, instrument=one.true)
    ideal = error(one.specimen, ideal_record)
    counts, truth = counted(one, Imperfections.typical(), folder / "counts.h5")
    print(f"simulated {counts.nbytes / 1e6:.0f} MB of counts twice")
    done, found = calibrated(counts, geometry=True)
    own = error(one.specimen, found.record)
    careless = error(one.specimen, ignored(counts))
    depth = next(e for e in found.geometry.estimates if e.name == "depth_um")
    off = found.frequency_Hz - truth.frequency_Hz
    width = 1 / (np.pi * max(s.t2_star for s in one.specimen.species))
    ratios = speed(counts, folder)
    rows = [
        ["error, ideal record", f"{ideal:.4f}"],
        ["error, calibrated / ideal", f"{own / ideal:.3f}"],
        ["error, uncalibrated / ideal", f"{careless / ideal:.3f}"],
        ["drift left (Hz r.m.s.)", f"{np.sqrt((off**2).mean()):.3f}"],
        ["narrowest line (Hz)", f"{width:.3f}"],
        ["standoff found (um)", f"{depth.value:.3f} ± {depth.standard_error:.3f}"],
        ["standoff true (um)", f"{one.true.sensor_layer.depth_um:.3f}"],
        *(
            [f"convert / read, {name}", f"{ratio:.2f} ± {spread:.2f}"]
            for name, (ratio, spread) in ratios.items()
        ),
        ["seconds in all", f"{time.perf_counter() - begin:.0f}"],
    ]
    table(rows, ["quantity", "value"])
    print(done.channels)
    return {
        "nrmse_over_ideal": own / ideal,
        "nrmse_uncalibrated_over_ideal": careless / ideal,
        "drift_residual_hz": float(np.sqrt((off**2).mean())),
        "drift_residual_over_line_width": float(np.sqrt((off**2).mean()) / width),
        "standoff_error_nm": 1e3 * (depth.value - one.true.sensor_layer.depth_um),
        "standoff_standard_error_nm": 1e3 * depth.standard_error,
        "stream_over_read": ratios["compressed"][0],
        "stream_over_read_plain": ratios["plain"][0],
    }


if __name__ == "__main__":
    main()
