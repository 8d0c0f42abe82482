"""An invented sample of lumps above a small sensor, measured with a geometry that is off."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from recon.calibrate.geometry_parameters import described
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.tables import SensorRing, VariableDensity
from recon.protocol import Protocol
from recon.record import Record
from recon.simulate import NoNoise, SimulationOptions, simulate
from recon.specimen import Species, Specimen
from tests.cases import instrument

GRID = Grid((2, 16, 16), (4e-6, 4e-6, 4e-6))
FINE = (1, 2, 2)
TIMES = np.arange(4) * 5e-3


def species() -> tuple[Species, ...]:
    shared = {
        "equivalent_nuclei": 3,
        "t1_s": 1.0,
        "diffusion_um2_per_ms": 0.0,
        "polarisation": 0.01,
    }
    return (
        Species(name="a", shift_ppm=1.3, t2_star_ms=100.0, **shared),
        Species(name="b", shift_ppm=30.0, t2_star_ms=60.0, **shared),
    )


def texture(grid: Grid, refinement: tuple[int, int, int], seed: int) -> Specimen:
    """Random lumps of some voxels, amounts that are not negative, faded out at the sides."""
    random = np.random.default_rng(seed)
    nz, ny, nx = (n * r for n, r in zip(grid.shape, refinement, strict=True))
    z, y, x = (np.arange(n) for n in (nz, ny, nx))
    maps = np.zeros((2, nz, ny, nx), np.float32)
    for one in maps:
        for _ in range(40):
            place = random.uniform(0.22, 0.78, 2) * (ny, nx)
            level, width = random.uniform(-1, nz), random.uniform(1.2, 3.5)
            lump = np.exp(-0.5 * ((y - place[0])[:, None] ** 2 + (x - place[1]) ** 2) / width**2)
            one += 60 * lump * np.exp(-0.5 * ((z - level) / 2.5) ** 2)[:, None, None]
    return Specimen(grid, species(), maps, refinement, "invented")


def apparatus(grid: Grid = GRID, strength: float = 1e5) -> Instrument:
    """A camera above a layer; `strength` of the nuclear gradients in mT/m."""
    gradients = {
        "nuclear_strength_mT_per_m": strength,
        "nuclear_pulse_max_ms": 1e7 / strength,
        "sensor_strength_mT_per_m": 1e5,
        "sensor_pulse_max_us": 100.0,
    }
    sensor = {"depth_um": 0.6, "thickness_um": 2.0, "crystal_cut": "100"}
    pixel = grid.voxel[2] * 1e6
    return instrument("camera", grid, pixel, sensor_layer=sensor, gradients=gradients)


def table(grid: Grid = GRID, shots: int = 24, seed: int = 3, **changes: object) -> Protocol:
    """Variable density on all four axes, with a gradient along z and one on the sensor."""
    settings: dict[str, object] = {
        "axes": (1, 2, 3, 4),
        "axial_bound_rad_per_um": 0.3,
        "sensor": SensorRing((0.15, 0.3)),
    }
    rule = VariableDensity(shots=shots, seed=seed, **(settings | changes))
    return rule.protocol(grid, TIMES)


def measured(
    specimen: Specimen, nominal: Instrument, protocol: Protocol, truth: dict[str, float]
) -> Record:
    """What the true geometry gives without noise, filed under the nominal descriptions."""
    real, wound = described(nominal, protocol, truth)
    record = simulate(specimen, real, wound, options=SimulationOptions(photon_noise=NoNoise()))
    return Record.from_arrays(
        nominal,
        protocol,
        record.samples_in_memory(),
        record.description_json,
        noise_sd=record.noise_sd,
    )


def noisy(record: Record, noise_sd: float, seed: int) -> Record:
    """The record with white complex noise of a stated standard deviation at one average."""
    random = np.random.default_rng(seed)
    white = random.standard_normal((*record.shape, 2)).view(complex)[..., 0] * np.sqrt(0.5)
    spread = noise_sd / np.sqrt(record.protocol.averages)[:, None, None, None]
    samples = record.samples_in_memory() + white * spread
    return replace(record, source=samples.astype(np.complex64), noise_sd=noise_sd)
