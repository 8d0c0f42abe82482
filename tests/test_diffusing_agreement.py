"""The simulator's walks in real space against the operator's decays in Fourier space."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from click.testing import CliRunner

from recon.cli.reconstruct import verb as reconstruct_verb
from recon.cli.simulate import verb as simulate_verb
from recon.demo import instrument
from recon.errors import InputError, InputWarning
from recon.forward.diffusing import DiffusingOperator
from recon.forward.diffusing_model import DiffusingModel
from recon.grid import Grid
from recon.priors import NonNegative, TotalVariation
from recon.protocol import Protocol, SpectralAxis
from recon.reconstruct import reconstruct
from recon.record import Record
from recon.result import load_result
from recon.simulate import NoNoise, SimulationOptions, simulate
from recon.simulate.diffusing import Walk
from recon.solvers.penalised import Penalised
from recon.solvers.ridge import Ridge
from recon.specimen import Species, Specimen
from recon.spreading import FreeDiffusion, StandingMap
from recon.unknown import ComplexCube, SpeciesAmounts

GRID = Grid((3, 24, 24), (4e-6, 4e-6, 4e-6))
STEP = GRID.lattice_step[0]
WAVES = np.array([[7, 0, 0], [4, -6, 0.35e6 / STEP], [0, 3, 0]]) * STEP
TIMES = np.array([1e-3, 6e-3, 15e-3])


def species(name: str, shift: float, diffusion: float) -> Species:
    return Species(
        name=name,
        shift_ppm=shift,
        equivalent_nuclei=3,
        t2_star_ms=100.0,
        t1_s=1.0,
        diffusion_um2_per_ms=diffusion,
        polarisation=0.05,
    )


PAIR = (species("slow", 1.3, 0.1), species("fast", 3.0, 1.0))


def apparatus():
    made = instrument().model_dump(exclude_none=True)
    made["camera"] = {"pixel_um": 4.0, "field_of_view_um": (96.0, 96.0)}
    return type(instrument()).model_validate(made)


def specimen(species=PAIR):
    y, x = np.mgrid[:48, :48] / 2
    maps = np.zeros((2, 3, 48, 48), np.float32)
    maps[0] = 40 * np.exp(-((y - 11) ** 2 + (x - 12) ** 2) / 18)
    maps[1, 1:] = 60 * np.exp(-((y - 13) ** 2 + (x - 11) ** 2) / 14)
    return Specimen(GRID, species, maps, (1, 2, 2), "invented")


def seen(record):
    return np.concatenate([samples for _, samples in record.shots()])


@pytest.mark.parametrize("spreading", [FreeDiffusion(), StandingMap()], ids=["free", "standing"])
def test_simulated_walks_agree_with_the_operator(spreading):
    """Within what the grid itself loses; a still model is off by many times that."""
    table = replace(Protocol.plain(WAVES, np.zeros((3, 2)), 1, TIMES), encoding_duration=0.8e-3)
    options = SimulationOptions(photon_noise=NoNoise(), axial_refinement=2, spreading=spreading)
    truth = specimen()
    measured = seen(simulate(truth, apparatus(), table, options=options))
    model = DiffusingModel.build(GRID, apparatus(), table, PAIR, 1e-9, spreading)
    amounts = truth.concentrations.astype(complex)
    moving = DiffusingOperator(model).apply(amounts)
    still = DiffusingOperator(replace(model, diffusion=np.zeros(2))).apply(amounts)
    scale = np.linalg.norm(still, axis=(2, 3))
    error = np.linalg.norm(measured - moving, axis=(2, 3)) / scale
    missed = np.linalg.norm(measured - still, axis=(2, 3)) / scale
    assert error.max() < 0.03
    assert missed[:2, 2].min() > 8 * error[:2, 2].max()


def test_walk_has_the_closed_form_of_the_pulse():
    """An even pattern loses exp(−D k² (t + δ/3)), found from walks and bridges alone."""
    wave, walk = 6e5, Walk(1e-9, 2e-3, 1e-3, standing=True)
    left = walk.lateral(wave, 2e-6, 64)
    assert left[0] == pytest.approx(np.exp(-1e-9 * wave**2 * (2e-3 + 1e-3 / 3)), rel=1e-4)
    free = Walk(1e-9, 2e-3, 1e-3, standing=False).lateral(wave, 0.1e-6, 4096)
    place = np.argmin(np.abs(2 * np.pi * np.fft.fftfreq(4096, 0.1e-6) - wave))
    exact = 2 * np.pi * np.fft.fftfreq(4096, 0.1e-6)[place]
    u, k, d = exact, wave, 1e-9
    expected = np.exp(-d * u**2 * 2e-3 - d * 1e-3 * (u**2 - u * k + k**2 / 3))
    assert free[place] == pytest.approx(expected, rel=1e-3)


FLAT = Grid((1, 24, 24), (4e-6, 4e-6, 4e-6))


def flat_specimen():
    y, x = np.mgrid[:48, :48] / 2
    maps = np.zeros((2, 1, 48, 48), np.float32)
    maps[0, 0] = 40 * np.exp(-((y - 11) ** 2 + (x - 8) ** 2) / 12)
    maps[1, 0] = 60 * np.exp(-((y - 13) ** 2 + (x - 15) ** 2) / 10)
    return Specimen(FLAT, PAIR, maps, (1, 2, 2), "invented")


def listened(spreading):
    """Listened to while it diffuses: 30 shots, a dead time, waiting times and first phases."""
    rng = np.random.default_rng(4)
    waves = np.zeros((30, 3))
    waves[:, :2] = rng.integers(-5, 6, (30, 2)) * STEP
    table = Protocol.plain(waves, np.zeros((30, 2)), 1, 1e-3 + np.arange(6) * 3e-3)
    table = replace(
        table,
        evolution_time=np.resize([0.0, 3e-3], 30),
        amplitude=np.exp(1j * rng.uniform(-np.pi, np.pi, 30)),
    )
    options = SimulationOptions(spreading=spreading)
    return simulate(flat_specimen(), apparatus(), table, options=options, seed=2)


@pytest.fixture(scope="module")
def standing_record():
    return listened(StandingMap())


@pytest.fixture(scope="module")
def free_record():
    return listened(FreeDiffusion())


def relative_error(maps):
    truth = flat_specimen().concentrations
    off, size = (np.linalg.norm(part.reshape(2, -1), axis=1) for part in (maps - truth, truth))
    return off / size


@pytest.mark.parametrize("spreading", [FreeDiffusion(), StandingMap()], ids=["free", "standing"])
def test_amounts_with_dead_time_first_phase_and_diffusion(spreading, request):
    """Right with the walk in the model; the fast species is lost without it."""
    name = "standing_record" if spreading.standing else "free_record"
    record = request.getfixturevalue(name)
    estimator = Penalised((TotalVariation(), NonNegative()), replicas=None)
    with_it = reconstruct(record, SpeciesAmounts(spreading=spreading), estimator)
    with pytest.warns(InputWarning, match="diffuses away"):
        without = reconstruct(record, SpeciesAmounts(), estimator)
    good, bad = relative_error(with_it.values), relative_error(without.values)
    assert good.max() < 0.13
    assert bad[1] > 4 * good[1]
    assert with_it.account.misfit == pytest.approx(1, abs=0.008)
    assert without.account.misfit > 1.01


def test_indirect_axis_does_not_diffuse():
    """Evolving before encoding, the same table is seen as if molecules stood still."""
    truth = flat_specimen()
    table = Protocol.plain(
        WAVES, np.zeros((3, 2)), 1, TIMES, spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE
    )
    moving, still = (
        seen(
            simulate(
                truth,
                apparatus(),
                table,
                options=SimulationOptions(photon_noise=NoNoise(), spreading=spreading),
            )
        )
        for spreading in (FreeDiffusion(), None)
    )
    np.testing.assert_allclose(moving, still, atol=1e-4 * np.abs(still).max())


def test_cube_warns_that_it_cannot_follow_diffusion(standing_record):
    with pytest.warns(InputWarning, match="a cube cannot follow it"):
        reconstruct(standing_record, ComplexCube(), Ridge())


def test_command_line_carries_diffusion(standing_record, tmp_path):
    """The same records and amounts through the verbs."""
    standing_record.protocol.save(tmp_path / "protocol.h5")
    apparatus().to_toml(tmp_path / "sensor.toml")
    flat_specimen().save(tmp_path / "specimen.toml")
    run = CliRunner().invoke
    files = [str(tmp_path / name) for name in ("specimen.toml", "sensor.toml", "protocol.h5")]
    record, result = str(tmp_path / "record.h5"), str(tmp_path / "result.h5")
    choice = ["--diffusion", "standing"]
    made = run(simulate_verb, [*files, "-o", record, "--seed", "2", *choice])
    assert made.exit_code == 0, made.output
    np.testing.assert_allclose(seen(Record.open(record)), seen(standing_record), rtol=1e-5)
    done = run(reconstruct_verb, [record, "-o", result, "--replicas", "0", *choice])
    assert done.exit_code == 0, done.output
    assert relative_error(load_result(result).values).max() < 0.13
    refused = run(reconstruct_verb, [record, "--cube", *choice])
    assert isinstance(refused.exception, InputError)
