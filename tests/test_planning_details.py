"""What limits, losses, trains and dials do to a plan; the bound against simulated records."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from recon.cli import main
from recon.demo import instrument
from recon.errors import InputError
from recon.forward import BlockQuadratic, ForwardOperator, accumulate
from recon.forward.block_matrix import BlockMatrix
from recon.grid import Grid
from recon.planning.bound import Bound, Expectation, Experiment
from recon.planning.candidates import Candidates, axial_wavenumbers, camera_kinds
from recon.planning.choice import Budget, Choice, MeanError, WorstError
from recon.planning.feasibility import Feasibility
from recon.planning.limits import Limits, Loss, excitations_of
from recon.planning.sweep import Dial
from recon.planning.tables import UniformRandom
from recon.planning.trains import Hyperpolarised, in_train
from recon.protocol import Protocol, SpectralAxis
from recon.reconstruct import reconstruct
from recon.simulate import simulate
from recon.solvers.ridge import Ridge
from recon.specimen import Specimen
from tests import test_planning as planning
from tests.test_feasibility import folder as folder


def specimen(seed: int = 0) -> Specimen:
    maps = np.random.default_rng(seed).uniform(0, 40, (2, *planning.GRID.shape))
    return Specimen(planning.GRID, planning.SPECIES, maps.astype(np.float32), notes="invented")


def test_errors_over_simulated_records_are_those_of_the_bound():
    """One specimen, many records by the simulator: the spread of the linear estimate per depth,
    both species pooled.

    Its covariance is ½ C G C with C = (G + ½Γ⁻¹)⁻¹ (Kay 1993); within 5 %.
    """
    setting, protocol = planning.experiment(species=planning.SPECIES), planning.table(20)
    sample = specimen()
    bound = Bound.of(setting, protocol)
    inverse = np.linalg.inv(bound._with_prior())
    normal = bound.quadratic.matrix.per_block.astype(complex)
    expected = np.sqrt(0.5 * bound.quadratic.plane_mean(inverse @ normal @ inverse).mean(axis=0))
    estimate = BlockMatrix(
        inverse.transpose(0, 2, 3, 1).astype(np.complex64), bound.quadratic.matrix.batch
    )
    found = []
    for seed in range(16):
        record = simulate(sample, setting.instrument, protocol, seed=seed)
        statistics = accumulate(setting.model(protocol), record.shots()).scaled(bound.unit)
        quadratic = BlockQuadratic(statistics, real=True)
        found.append(quadratic.filtered(estimate, quadratic.linear))
    measured = np.sqrt(np.var(found, axis=0, ddof=1).mean(axis=(0, 2, 3)))
    np.testing.assert_allclose(measured, expected, rtol=0.05)


def test_sensitivity_is_the_information_of_plane_waves():
    """One plane: 2‖A c‖²/σ² of a cosine of unit norm, Fisher information of a real amplitude."""
    grid = Grid((1, 8, 8), (4e-6,) * 3)
    data = planning.apparatus().model_dump(exclude_none=True)
    data["camera"] = {"pixel_um": 4.0, "field_of_view_um": (32.0, 32.0)}
    made = type(instrument()).model_validate(data)
    setting = Experiment(made, grid, planning.SPECIES[:1], Expectation((20.0,), 8.0))
    protocol = UniformRandom(shots=5).protocol(grid, planning.TIMES)
    wave, told = Bound.of(setting, protocol).sensitivity()
    assert wave[0] == pytest.approx(grid.lattice_step[0])
    operator = ForwardOperator(setting.model(protocol), np.complex128)
    y, x = np.indices((8, 8))
    roots = []
    for ky, kx in ((1, 0), (-1, 0), (0, 1), (1, 1), (-1, 1)):
        wavy = np.cos(2 * np.pi * (ky * y + kx * x) / 8)
        wavy /= np.linalg.norm(wavy)
        samples = operator.apply(wavy.reshape(1, 1, 8, 8).astype(complex))
        roots.append(np.sqrt(2) * np.linalg.norm(samples) / made.field_noise)
    assert told[0, 0] == pytest.approx(np.mean(roots), rel=1e-3)


def test_an_indirect_axis_takes_an_excitation_per_sample():
    """Eight samples take eight times as long as listening once."""
    made = planning.experiment(species=planning.SPECIES)
    indirect = UniformRandom(shots=10).protocol(
        planning.GRID, planning.TIMES, spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE
    )
    listening = replace(indirect, spectral_axis=SpectralAxis.LISTEN_AFTER_ENCODING)
    assert (excitations_of(indirect), excitations_of(listening)) == (8, 1)
    times = [
        Feasibility(
            made, table, (1.0, 1.0), None, Limits(0.5, excitations=excitations_of(table))
        ).seconds()
        for table in (indirect, listening)
    ]
    pulses = Limits().pulse_time(made.instrument, indirect.nuclear_wavevector)
    assert times[0] == pytest.approx(8 * (0.5 * 10 + pulses.sum()))
    assert times[1] < times[0] / 4


def test_clock_ticks_and_pauses_by_hand():
    made = instrument()
    still = np.zeros((1, 3))
    assert Limits(0.31, tick_s=0.1).shot_time(made, still) == pytest.approx([0.4])
    assert Limits(0.3, tick_s=0.1).shot_time(made, still) == pytest.approx([0.3])
    assert Limits(0.3, pause_s=2.0, excitations=4).shot_time(made, still) == pytest.approx([9.2])
    assert Limits(0.3).shot_time(made, still, 0.05) == pytest.approx([0.35])
    with pytest.raises(InputError, match="excitations"):
        Limits(excitations=0)


def test_loss_by_hand():
    """exp(−2 D k² δ/3) during the pulse times exp(−2 D k² t) of what is heard, one time."""
    limits, made = Limits(), instrument()
    k = np.array([[2e5, 0.0, 0.0]])
    pulse = limits.pulse_time(made, k)[0]
    loss = Loss(made, limits, np.array([2e-10]), np.array([0.1]), np.array([0.01]))
    expected = np.exp(-2 * 2e-10 * 4e10 * (pulse / 3 + 0.01))
    assert loss.power_left(k)[0] == pytest.approx(expected)
    assert Loss.of(made, limits, planning.SPECIES).power_left(k)[0] == pytest.approx(
        np.exp(-2 * 2e-10 * 4e10 * pulse / 3)
    )


def test_listening_makes_the_choice_wind_less():
    """What diffuses away while heard is not worth winding far."""
    setting, limits = planning.experiment(), Limits(largest_duty_cycle=1.0)
    mean = {}
    for listened in (None, np.arange(16) * 8e-3):
        loss = Loss.of(setting.instrument, limits, setting.species, listened)
        candidates = Candidates.of(setting.grid, setting.instrument, camera_kinds(), limits, loss)
        chosen = Choice().choose(setting, candidates, planning.TIMES, Budget(shots=24))
        wave = np.linalg.norm(chosen.protocol.nuclear_wavevector, axis=1)
        mean[listened is None] = np.average(wave, weights=chosen.protocol.averages)
    assert mean[False] < 0.9 * mean[True]


def test_chosen_evolution_times_go_through_the_whole_chain(tmp_path):
    """k, q and t1 chosen together: better than the same k with the times shuffled, and usable."""
    setting = planning.experiment(species=planning.SPECIES)
    kinds = camera_kinds(evolution_s=tuple(np.arange(8) * 8e-3))
    candidates = Candidates.of(setting.grid, setting.instrument, kinds)
    chosen = Choice(exchanges=4).choose(setting, candidates, np.zeros(1), Budget(shots=60))
    table = chosen.protocol
    assert len(table.evolutions[0]) > 1
    ours = (Bound.of(setting, table).standard_error() ** 2).mean()
    assert chosen.value == pytest.approx(ours / 400, rel=1e-3)
    drawn = np.random.default_rng(0).choice(np.arange(8) * 8e-3, len(table))
    others = replace(table, evolution_time=drawn)
    assert ours < (Bound.of(setting, others).standard_error() ** 2).mean()
    table.save(tmp_path / "table.h5")
    record = simulate(specimen(), setting.instrument, Protocol.load(tmp_path / "table.h5"), seed=1)
    assert reconstruct(record, estimator=Ridge()).values.shape == (2, *planning.GRID.shape)


@pytest.mark.parametrize("criterion", [MeanError(), WorstError()])
def test_exchange_keeps_to_the_time_and_never_makes_worse(criterion):
    setting = planning.experiment()
    limits = Limits(base_duration_s=2e-3, largest_duty_cycle=1.0)
    candidates = Candidates.of(setting.grid, setting.instrument, camera_kinds(), limits)
    budget = Budget(seconds=0.03)
    plain, swapped = (
        Choice(criterion, exchanges=n).choose(setting, candidates, planning.TIMES, budget)
        for n in (0, 12)
    )
    assert swapped.value <= plain.value * (1 + 1e-6)
    assert sum(candidates.seconds[pair] for pair in swapped.pairs) <= 0.03 * (1 + 1e-6)


def test_axial_wavenumbers_by_hand():
    """Three planes of 4 µm: steps of π/12, up to π/4; without a z gradient, none."""
    made = instrument()
    found = axial_wavenumbers(planning.GRID, made)
    np.testing.assert_allclose(found, np.arange(-3, 4) * np.pi / 12, rtol=1e-9)
    still = made.gradients.model_copy(update={"nuclear_strength_mT_per_m": (1.0, 1.0, 0.0)})
    assert axial_wavenumbers(planning.GRID, made.model_copy(update={"gradients": still})) == (0.0,)


@pytest.mark.parametrize("criterion", [MeanError(), WorstError()])
def test_lazy_scoring_loses_nothing(criterion):
    """Against scoring every kind in every step."""
    setting = planning.experiment(species=planning.SPECIES)
    kinds = camera_kinds((1, 2), axial_wavenumbers(planning.GRID, setting.instrument))
    candidates = Candidates.of(planning.GRID, setting.instrument, kinds)
    lazy, eager = (
        Choice(criterion, rescore_all_every=n).choose(
            setting, candidates, planning.TIMES, Budget(shots=40)
        )
        for n in (16, 1)
    )
    assert lazy.value <= 1.002 * eager.value


def test_region_counts_by_its_planes():
    region = np.zeros(planning.GRID.shape, bool)
    region[1, 2:4, 3] = True
    region[2, 0, 0] = True
    assert MeanError.of_region(region).depth_weights == (0.0, 2.0, 1.0)


def test_train_spends_an_excitation_per_sample():
    """Two shots of two excitations from one fill of four, constant angle 30°, no T1."""
    table = UniformRandom(shots=2).protocol(planning.GRID, [0.0, 1e-3])
    train = Hyperpolarised(1e12, per_fill=4, fill_time_s=10.0, flip_angle_deg=30.0)
    signal = 0.5 * np.cos(np.pi / 6) ** np.arange(4)
    expected = [np.sqrt((signal[:2] ** 2).mean()), np.sqrt((signal[2:] ** 2).mean())]
    made = in_train(table, train, 1.0, excitations=2)
    np.testing.assert_allclose(np.abs(made.amplitude), expected)
    assert np.diff(made.clock_time) == pytest.approx([2.0])


@pytest.mark.parametrize(
    "text",
    [
        "protocol.averages=1,4",
        "readout.noise_gain=1,3",
        "instrument.bias_field_mT.z=50,250",
        "expectation.feature_um=5,20",
    ],
)
def test_dials_that_lower_the_limit(text):
    """More averages, less noise, thermal polarisation at a higher field, coarser structure."""
    setting, protocol = planning.experiment(species=planning.SPECIES), planning.table()
    if "bias" in text:
        thermal = tuple(s.model_copy(update={"polarisation": None}) for s in setting.species)
        setting = replace(setting, species=thermal, noise_gain=1e4)
    dial = Dial.parse(text)
    low, high = (
        Bound.of(*dial.turned(setting, protocol, value)).detection_limit()[0, 0]
        for value in dial.values
    )
    assert high < 0.9 * low


def test_a_larger_voxel_takes_view_pixels_and_wavevectors_along():
    setting, protocol = planning.experiment(), planning.table()
    made, table = Dial.parse("grid.voxel_um=8").turned(setting, protocol, 8.0)
    assert made.grid.voxel == pytest.approx((4e-6, 8e-6, 8e-6))
    assert made.instrument.view == pytest.approx((128e-6, 128e-6))
    assert made.instrument.pixel == pytest.approx((8e-6, 8e-6))
    steps = table.nuclear_wavevector[:, 0] / made.grid.lattice_step[1]
    before = protocol.nuclear_wavevector[:, 0] / setting.grid.lattice_step[1]
    np.testing.assert_allclose(steps, before, atol=1e-9)
    np.testing.assert_array_equal(table.nuclear_wavevector[:, 2], protocol.nuclear_wavevector[:, 2])
    assert np.isfinite(Bound.of(made, table).detection_limit()).all()


def test_an_amount_is_not_seen_by_expecting_it():
    """One shot of almost no signal: the limit is far beyond the expected spread."""
    setting = planning.experiment(spread=1.0)
    weak = replace(planning.table(1), amplitude=np.full(1, 1e-3 + 0j))
    bound = Bound.of(setting, weak)
    assert bound.standard_error() == pytest.approx(1.0, rel=1e-3)
    assert (bound.detection_limit() > 100).all()
    strong = Bound.of(replace(setting, noise_gain=1e3), planning.table(200))
    np.testing.assert_allclose(
        strong.error_of_shots()[0, 0], strong.standard_error()[0, 0], rtol=0.1
    )


def test_four_averages_halve_the_noise_without_prior():
    setting = planning.experiment()
    protocol = UniformRandom(shots=200, axes=(1,), axial_bound_rad_per_um=0.8).protocol(
        planning.GRID, planning.TIMES
    )
    _, averaged = Dial.parse("protocol.averages=4").turned(setting, protocol, 4)
    one, four = (Bound.of(setting, p).standard_error_without_prior() for p in (protocol, averaged))
    np.testing.assert_allclose(one / four, 2.0, rtol=1e-3)


def test_thermal_ten_millimolar_in_a_night_is_out_of_reach_and_said_so():
    """10 mM thermal, 10 µm voxels, 0.1 T, 12 h: short, and the mend is far beyond the night."""
    grid = Grid((2, 8, 8), (1e-5,) * 3)
    data = planning.apparatus().model_dump(exclude_none=True)
    data |= {
        "camera": {"pixel_um": 10.0, "field_of_view_um": (80.0, 80.0)},
        "bias_field_mT": (0.0, 0.0, 95.0),
    }
    thermal = tuple(s.model_copy(update={"polarisation": None}) for s in planning.SPECIES[:1])
    setting = Experiment(
        type(instrument()).model_validate(data), grid, thermal, Expectation((5.0,), 20.0)
    )
    table = UniformRandom(shots=40, axial_bound_rad_per_um=0.2).protocol(grid, planning.TIMES)
    night = replace(table, averages=table.averages * 1080)
    plan = Feasibility(setting, night, (10.0,), 12 * 3600.0)
    assert plan.seconds() == pytest.approx(12 * 3600, rel=0.02)
    text = plan.report()
    assert "verdict: not feasible: " in text
    assert plan.shortfall().min() > 1
    assert "polarisation (now thermal)" in text or "no gain" in text


def test_plan_verb_with_trains_and_times(folder: Path, capsys):
    command = ["plan", "specimen.toml", "instrument.toml", "--samples", "4", "--exchanges", "2"]
    main([*command, "--one-time-per-shot", "--shots", "10", "--picture", "s.png"])
    assert Path("s.png").exists()
    main([*command, "--listen", "--shots", "6", "--train", "hyperpolarised", "--fills", "1"])
    assert "verdict" in capsys.readouterr().out
    train = Protocol.load("protocol.h5")
    assert len(train) <= 6 and np.ptp(np.abs(train.amplitude)) >= 0
    for wrong in (["--listen", "--one-time-per-shot"], ["--plane-weight", "1"], ["--per-fill", "2",
                  "--fills", "1", "--train", "hyperpolarised"]):  # fmt: skip
        with pytest.raises(SystemExit) as leaving:
            main([*command, "-o", "new.h5", *wrong])
        assert leaving.value.code == 2
        assert len(capsys.readouterr().err.splitlines()) == 1
        assert not Path("new.h5").exists()
