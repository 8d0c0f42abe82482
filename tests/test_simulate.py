"""The simulator against direct sums of dipoles, and its noise against the stated one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import constants

from recon.errors import InputError, InputWarning
from recon.grid import Grid
from recon.instrument import Camera, Instrument
from recon.physics.dipole import magnetisation_direction
from recon.physics.magnetisation import curie_magnetisation, polarised_magnetisation
from recon.physics.optics import optical_transfer
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


def small(grid_x: int = 2) -> Grid:
    return Grid((2, 2, grid_x), (2 * MICRON, 2 * MICRON, 2 * MICRON), base_height=0.5 * MICRON)


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


def protocol_beyond() -> Protocol:
    return Protocol.plain(np.full((1, 3), 1e15), np.zeros((1, 2)), 1, [0.0])


def dipole_field(offset, sensing, moment):
    """(μ0/4π)[3(n·r)(m·r)/r² − n·m]/r³, offset (…, [x, y, z]): any text on magnetism."""
    square = (offset**2).sum(-1)
    shape = 3 * (offset @ sensing) * (offset @ moment) / square - sensing @ moment
    return constants.mu_0 / (4 * np.pi) * shape / square**1.5


def light_of_dipoles(apparatus, sample, shots, shot, nodes=4):
    """Sum over dipoles inside every fine voxel: mean light above each one, (y, x), all species.

    Gauss nodes in the voxels, in the layer and in the area that is averaged.
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
    oy, ox = ((p[:, None] + e / 2 * points).ravel() for p, e in zip((y, x), edge[1:], strict=True))
    points, below = np.polynomial.legendre.leggauss(6)
    depth = apparatus.depth + apparatus.thickness * (points + 1) / 2
    down, over_y, over_x = np.meshgrid(-depth, oy, ox, indexing="ij")
    sensors = np.stack([over_x, over_y, down], -1)
    total = np.zeros(sensors.shape[:-1], complex)
    for index in np.ndindex(*sample.maps.shape[1:]):
        amount = sample.maps[(slice(None), *index)].sum()
        if amount:
            place = np.array([x[index[2]], y[index[1]], z[index[0]]]) + sub
            seen = dipole_field(sensors[..., None, :] - place, n, m)
            total += amount * (seen @ (share * np.exp(1j * place @ k)))
    density = polarised_magnetisation(constants.N_A * 3.0, 0.01) * np.prod(edge)
    total *= np.exp(1j * sensors[..., :2] @ q) * density * shots.amplitude[shot]
    light = np.tensordot(below / 2, total, 1).reshape(len(y), nodes, len(x), nodes)
    return np.einsum("yaxb,a,b->yx", light, weights, weights) / 4


def test_one_detector_agrees_with_a_direct_sum() -> None:
    """Nuclear, axial and sensor gradient, each sensing axis, two species: ≤ 1e-3."""
    grid = small()
    apparatus, sample, shots = instrument(camera=False, grid=grid), specimen(grid), protocol(4)
    options = SimulationOptions(lateral_refinement=2, photon_noise=NoNoise())
    found = simulate(sample, apparatus, shots, options=options).samples_in_memory()
    expected = [light_of_dipoles(apparatus, sample, shots, j).mean() for j in range(4)]
    error = np.abs(found[:, 0, 0, 0] - expected).max()
    assert error <= 1e-3 * np.abs(expected).max()


def test_sharp_camera_agrees_with_a_direct_sum_and_converges() -> None:
    """With negligible blur the pixels are means of the light: ≤ 5e-4 as sampling refines."""
    grid = small(3)
    apparatus, sample, shots = instrument(grid=grid), specimen(grid), protocol(1, axes=(2,))
    apparatus = apparatus.model_copy(
        update={"optics": apparatus.optics.model_copy(update={"wavelength_nm": 1.0})}
    )
    light = light_of_dipoles(apparatus, sample, shots, 0)
    expected = light.reshape(2, 2, 3, 2).mean(axis=(1, 3))
    errors = []
    for refinement in (1, 2, 4):
        options = SimulationOptions(lateral_refinement=refinement, photon_noise=NoNoise())
        found = simulate(sample, apparatus, shots, options=options).samples_in_memory()
        errors.append(np.abs(found[0, 0] - expected).max() / np.abs(expected).max())
    assert errors[1] < errors[0] / 2
    assert max(errors[1:]) <= 5e-4


def test_extra_axial_refinement_changes_nothing_but_rounding() -> None:
    """The specimen is uniform within its fine voxels, however finely they are summed."""
    once = simulate(specimen(), instrument(), protocol(), options=QUIET).samples_in_memory()
    finer = SimulationOptions(axial_refinement=3, photon_noise=NoNoise())
    thrice = simulate(specimen(), instrument(), protocol(), options=finer).samples_in_memory()
    assert np.abs(once - thrice).max() <= 5e-4 * np.abs(once).max()


def test_blur_lowers_a_sensor_wave_by_the_optical_transfer() -> None:
    """A smooth field times exp(iq·ρ) has lateral frequency q: its image falls as the transfer."""
    grid = Grid((1, 48, 48), (2 * MICRON, 0.5 * MICRON, 0.5 * MICRON), base_height=30 * MICRON)
    blob = np.zeros((2, 1, 48, 48), np.float32)
    blob[0, 0, 18:30, 18:30] = 5
    sample = Specimen(grid, (species("a", 4.7), species("b", 4.7)), blob, (1, 1, 1), "invented")
    wave = 2 * np.pi / (1.6 * MICRON)
    shots = Protocol.plain(np.zeros((2, 3)), [[0, 0], [wave, 0]], 2, [0.0])
    camera = {"pixel_um": 0.5, "field_of_view_um": (24.0, 24.0)}
    apparatus = instrument(grid=grid).model_copy(update={"camera": Camera(**camera)})
    plain, wound = simulate(sample, apparatus, shots, options=QUIET).samples_in_memory()[:, 0]
    centre = np.s_[20:28, 20:28]
    ratio = np.linalg.norm(wound[centre]) / np.linalg.norm(plain[centre])
    optics = apparatus.optics
    transfer = optical_transfer(wave, optics.numerical_aperture, optics.wavelength)
    assert ratio == pytest.approx(transfer * np.sinc(wave * 0.5 * MICRON / 2 / np.pi), rel=0.03)


def test_species_decay_and_turn_as_stated() -> None:
    """exp(−i2π(δ − δ_ref)·1e-6·f·t − t/T2*): the sign by which a line at low ppm turns forward."""
    maps = np.zeros((2, 2, 4, 6), np.float32)
    maps[0] = np.random.default_rng(0).uniform(0, 5, (2, 4, 6))
    sample = Specimen(GRID, (species("a", 1.3), species("b", 4.7)), maps, (1, 1, 1), "invented")
    apparatus = instrument()
    samples = simulate(sample, apparatus, protocol(), options=QUIET).samples_in_memory()
    ratio = samples[:, 2] / samples[:, 0]
    frequency = (1.3 - 4.7) * 1e-6 * apparatus.larmor_frequency
    expected = np.exp(-2j * np.pi * frequency * 7e-3 - 7e-3 / 50e-3)
    np.testing.assert_allclose(ratio, expected, rtol=1e-4)


def test_thermal_specimen_has_its_curie_magnetisation() -> None:
    line = species("a", 4.7, polarisation=None)
    hyper = species("a", 4.7, polarisation=1e-3)
    maps = specimen().maps[:1]
    weak, strong = (
        simulate(
            Specimen(GRID, (one,), maps, (1, 2, 2), "invented"),
            instrument(),
            protocol(1),
            options=QUIET,
        ).samples_in_memory()
        for one in (line, hyper)
    )
    field = float(np.linalg.norm(instrument().bias_field))
    ratio = curie_magnetisation(1.0, field, 298.15) / polarised_magnetisation(1.0, 1e-3)
    np.testing.assert_allclose(weak, strong * ratio, rtol=1e-4)


@pytest.mark.parametrize("noise", [PoissonNoise(), PoissonNoise(normal_above=1.0)])
def test_photon_noise_is_the_stated_one(noise: PoissonNoise) -> None:
    """Counts below and above the change to the normal distribution; averages count."""
    shots = protocol(40)
    averages = np.resize([1, 4], 40)
    shots = replace(shots, averages=averages)
    options = SimulationOptions(photon_noise=noise)
    apparatus = instrument(photons=1e5)
    record = simulate(specimen(), apparatus, shots, options=options, seed=5)
    truth = simulate(specimen(), apparatus, shots, options=QUIET).samples_in_memory()
    error = record.samples_in_memory() - truth
    for count in (1, 4):
        part = error[averages == count]
        spread = np.sqrt(np.mean(np.abs(part) ** 2))
        assert spread == pytest.approx(record.noise_sd / np.sqrt(count), rel=0.05)
        assert np.std(part.real) == pytest.approx(np.std(part.imag), rel=0.1)
        assert abs(part.mean()) < 4 * spread / np.sqrt(part.size)
    assert record.noise_sd == apparatus.field_noise


def test_same_seed_same_record_and_file_equals_memory(tmp_path) -> None:
    shots = protocol()
    first = simulate(specimen(), instrument(), shots, seed=3).samples_in_memory()
    filed = simulate(specimen(), instrument(), shots, seed=3, path=tmp_path / "a.h5")
    other = simulate(specimen(), instrument(), shots, seed=4).samples_in_memory()
    assert np.array_equal(first, Record.open(tmp_path / "a.h5").samples_in_memory())
    assert filed.specimen.names == ("a", "b")
    assert not np.array_equal(first, other)


def test_jitter_moves_the_wavevectors_but_not_the_protocol() -> None:
    options = SimulationOptions(wavevector_jitter=0.02, photon_noise=NoNoise())
    exact = simulate(specimen(), instrument(), protocol(), options=QUIET)
    moved = simulate(specimen(), instrument(), protocol(), options=options, seed=1)
    change = moved.samples_in_memory() - exact.samples_in_memory()
    relative = np.linalg.norm(change) / np.linalg.norm(exact.samples_in_memory())
    assert 0.001 < relative < 0.5
    assert moved.protocol.digest() == exact.protocol.digest()


def test_progress_counts_to_the_end() -> None:
    seen = []
    simulate(specimen(), instrument(), protocol(), progress=lambda *step: seen.append(step))
    assert seen[-1] == (6, 6)
    assert seen == sorted(seen)


def test_strong_fields_warn() -> None:
    maps = np.full((1, 2, 4, 6), 5e4, np.float32)
    sample = Specimen(GRID, (species("water", 4.7, 0.5),), maps, (1, 1, 1), "invented")
    with pytest.warns(InputWarning, match="linear range"):
        simulate(sample, instrument(), protocol())


@pytest.mark.parametrize(
    ("message", "change"),
    [
        ("has no concentration maps", {"sample": Specimen(GRID, (species("a", 1.0),))}),
        ("um along y, the view", {"apparatus": instrument(grid=small(4))}),
        ("the limit is", {"options": SimulationOptions(memory_limit_gib=1e-6)}),
        ("beyond|times the gradient's limit", {"shots": protocol_beyond()}),
    ],
)
def test_bad_input_is_one_line(message: str, change: dict, tmp_path) -> None:
    given = {"sample": specimen(), "apparatus": instrument(), "shots": protocol()} | change
    path = tmp_path / "record.h5"
    options = given.get("options")
    with pytest.raises(InputError, match=message) as caught:
        simulate(given["sample"], given["apparatus"], given["shots"], options=options, path=path)
    assert "\n" not in str(caught.value)
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("wrong", [{"lateral_refinement": 0}, {"wavevector_jitter": -0.1}])
def test_wrong_options_are_refused(wrong: dict) -> None:
    with pytest.raises(InputError):
        SimulationOptions(**wrong)
