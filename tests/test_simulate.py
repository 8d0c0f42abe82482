"""The simulator against direct sums of dipoles, and its noise against the stated one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import constants

from recon.errors import InputError, InputWarning
from recon.grid import Grid
from recon.instrument import Instrument
from recon.physics.dipole import magnetisation_direction
from recon.physics.magnetisation import polarised_magnetisation
from recon.protocol import Protocol
from recon.record import Record
from recon.simulate import NoNoise, PoissonNoise, SimulationOptions, simulate
from recon.specimen import Species, Specimen

MICRON = 1e-6
GRID = Grid((2, 4, 6), (2 * MICRON, 2 * MICRON, 2 * MICRON), base_height=0.5 * MICRON)
QUIET = SimulationOptions(photon_noise=NoNoise())


def instrument(*, camera: bool = True, grid: Grid = GRID, photons: float = 1e6) -> Instrument:
    view = (grid.shape[2] * grid.voxel[2] * 1e6, grid.shape[1] * grid.voxel[1] * 1e6)
    detector = {"field_of_view_um": view} | ({"pixel_um": 2.0} if camera else {})
    return Instrument.model_validate(
        {
            "temperature_C": 25.0,
            "bias_field_mT": (20.0, -35.0, 50.0),
            "sensor_layer": {"depth_um": 0.5, "thickness_um": 1.5, "crystal_cut": "100"},
            "optics": {"numerical_aperture": 0.8, "wavelength_nm": 700.0},
            "camera" if camera else "one_detector": detector,
            "gradients": {
                "nuclear_strength_mT_per_m": 1e6,
                "nuclear_pulse_max_ms": 1e3,
                "sensor_strength_mT_per_m": 1e6,
                "sensor_pulse_max_us": 1e3,
            },
            "readout": {
                "photons_per_readout": photons,
                "contrast": 0.05,
                "sensing_time_us": 10.0,
                "efficiency": 0.6,
                "readouts_per_sample": 10,
            },
        }
    )


def species(name: str, shift_ppm: float, polarisation: float | None = 0.01) -> Species:
    return Species(
        name=name,
        shift_ppm=shift_ppm,
        equivalent_nuclei=3,
        t2_star_ms=50.0,
        t1_s=1.0,
        diffusion_um2_per_ms=0.0,
        polarisation=polarisation,
    )


def specimen(grid: Grid = GRID, refinement=(1, 2, 2), seed: int = 1) -> Specimen:
    fine = tuple(n * r for n, r in zip(grid.shape, refinement, strict=True))
    maps = np.random.default_rng(seed).uniform(0, 10, (2, *fine)).astype(np.float32)
    lines = (species("a", 1.3), species("b", 4.7))
    return Specimen(grid, lines, maps, refinement, "invented")


def protocol(shots: int = 6, axes=(1, 2, 3, 4), sensor: bool = True, seed: int = 2) -> Protocol:
    generator = np.random.default_rng(seed)
    nuclear = generator.uniform(-1, 1, (shots, 3)) * [1.5e6, 1.5e6, 5e5]
    return Protocol(
        nuclear_wavevector=nuclear,
        sensor_wavevector=generator.uniform(-1, 1, (shots, 2)) * 1e6 * sensor,
        sensing_axis=np.resize(axes, shots),
        amplitude=np.exp(1j * np.arange(shots)) * 0.8,
        averages=np.ones(shots, int),
        clock_time=np.arange(shots) * 1.0,
        sample_times=np.array([0.0, 2e-3, 7e-3]),
    )


def dipole_field(offset, sensing, moment):
    """(μ0/4π)[3(n·r)(m·r)/r² − n·m]/r³, offset (…, [x, y, z]): any text on magnetism."""
    square = (offset**2).sum(-1)
    shape = 3 * (offset @ sensing) * (offset @ moment) / square - sensing @ moment
    return constants.mu_0 / (4 * np.pi) * shape / square**1.5


def mean_field_over_view(apparatus, sample, shots, shot, nodes=4, places=3):
    """Sum over dipoles inside every fine voxel, averaged over places in the view, all species.

    Gauss nodes in the voxels and the layer; `places`² equally spaced points per fine voxel.
    """
    n = apparatus.sensing_direction(int(shots.sensing_axis[shot]))
    m = magnetisation_direction(apparatus.bias_direction)
    k, q = shots.nuclear_wavevector[shot], shots.sensor_wavevector[shot]
    z, y, x = sample.grid.sub_positions(sample.refinement)
    edge = np.array(sample.grid.voxel) / sample.refinement
    points, weights = np.polynomial.legendre.leggauss(nodes)
    sub = np.stack(np.meshgrid(*(e / 2 * points for e in edge), indexing="ij"), -1)
    sub = sub.reshape(-1, 3)[:, ::-1]
    share = np.einsum("i,j,k", weights, weights, weights).ravel() / 8
    points, weights = np.polynomial.legendre.leggauss(8)
    spread = (np.arange(places) + 0.5) / places - 0.5
    oy, ox = ((p[:, None] + e * spread).ravel() for p, e in zip((y, x), edge[1:], strict=True))
    depth = apparatus.depth + apparatus.thickness * (points + 1) / 2
    down, over_y, over_x = np.meshgrid(-depth, oy, ox, indexing="ij")
    sensors = np.stack([over_x, over_y, down], -1).reshape(-1, 3)
    listening = np.exp(1j * sensors[:, :2] @ q) / (oy.size * ox.size)
    listening *= np.repeat(weights / 2, oy.size * ox.size)
    total = 0j
    for index in np.ndindex(*sample.maps.shape[1:]):
        place = np.array([x[index[2]], y[index[1]], z[index[0]]]) + sub
        seen = listening @ dipole_field(sensors[:, None] - place, n, m)
        total += sample.maps[(slice(None), *index)].sum() * (
            seen @ (share * np.exp(1j * place @ k))
        )
    density = polarised_magnetisation(constants.N_A * 3.0, 0.01)
    return total * density * np.prod(edge) * shots.amplitude[shot]


def test_one_detector_agrees_with_a_direct_sum() -> None:
    """Every shot: nuclear, axial and sensor gradient, each sensing axis, two species."""
    grid = Grid((2, 3, 2), (2 * MICRON, 2 * MICRON, 2 * MICRON), base_height=0.5 * MICRON)
    apparatus, sample = instrument(camera=False, grid=grid), specimen(grid, (1, 2, 2))
    shots = protocol(4)
    options = SimulationOptions(lateral_refinement=3, photon_noise=NoNoise())
    found = simulate(sample, apparatus, shots, options=options).samples_in_memory()
    expected = np.array([mean_field_over_view(apparatus, sample, shots, j) for j in range(4)])
    np.testing.assert_allclose(found[:, 0, 0, 0], expected, rtol=0, atol=1e-3 * abs(expected).max())
