"""Estimators of drift, phase, decay and pickup: bias and coverage on simulated records."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from recon.calibrate.account import excess
from recon.calibrate.calibration import Calibration, calibrate, shrunk
from recon.calibrate.consistency import ShotConsistency, shot_factors
from recon.calibrate.decay import measure_decay
from recon.calibrate.drift import LineDrift, measure_drift, smoothed_walk
from recon.calibrate.fixed import Fixed
from recon.cli import main
from recon.counts import convert
from recon.errors import InputError
from recon.record import Record
from recon.simulate import NoNoise, SimulationOptions, simulate
from recon.simulate.imperfections import Imperfections
from tests.counting import counted, instrument, protocol, specimen

LEVELS = (0.3, 1.0, 3.0)
"""Noise relative to the small instrument's own."""


@pytest.fixture(scope="module")
def quiet() -> Record:
    """The small experiment without noise, from the simulator."""
    options = SimulationOptions(photon_noise=NoNoise())
    return simulate(specimen(), instrument(), protocol(24), options=options)


def spoilt(quiet: Record, level: float, seed: int, frequency=None, factor=None) -> Record:
    """The record with each shot turned and scaled, and noise of a known size."""
    rng = np.random.default_rng(seed)
    samples = quiet.samples_in_memory().copy()
    times = quiet.protocol.sample_times
    if frequency is not None:
        samples *= np.exp(-2j * np.pi * frequency[:, None] * times)[:, :, None, None]
    if factor is not None:
        samples *= factor[:, None, None, None]
    noise = level * quiet.noise_sd
    samples += noise * rng.standard_normal((*samples.shape, 2)).view(complex)[..., 0] / np.sqrt(2)
    return Record.from_arrays(
        quiet.instrument, quiet.protocol, samples, quiet.description_json, noise_sd=noise
    )


def pulls(found: np.ndarray, errors: np.ndarray) -> tuple[float, float, float]:
    """Mean in standard errors of the mean, spread, and share within one error."""
    pull = found / errors
    return (
        float(pull.mean() * np.sqrt(pull.size)),
        float(pull.std()),
        float(np.mean(np.abs(pull) < 1)),
    )


@pytest.mark.parametrize("level", LEVELS)
def test_frequencies_are_unbiased_with_true_errors(quiet: Record, level: float) -> None:
    rng = np.random.default_rng(5)
    found, errors = [], []
    for seed in range(6):
        truth = rng.uniform(-4, 4, len(quiet))
        drift = measure_drift(spoilt(quiet, level, seed, truth), LineDrift(smooth=False))
        found.append(drift.raw_Hz - truth)
        errors.append(drift.raw_error_Hz)
    mean, spread, inside = pulls(np.concatenate(found), np.concatenate(errors))
    assert abs(mean) < 4 and 0.8 < spread < 1.25 and 0.58 < inside < 0.8


def test_a_reference_line_follows_the_field(quiet: Record) -> None:
    truth = np.linspace(-3, 3, len(quiet))
    drift = measure_drift(spoilt(quiet, 0.3, 0, truth), LineDrift(("water",), smooth=False))
    # the other species is left out of the model, and its line pulls: more than the noise, less
    # than a tenth of the 5.3 Hz line width 1/(pi T2*)
    assert np.abs(drift.raw_Hz - truth).max() < 0.53
    with pytest.raises(InputError, match="'oil' is not among water, fat"):
        measure_drift(quiet, LineDrift(("oil",)))


def test_smoothing_a_walk_helps_and_says_by_how_much() -> None:
    """Simulated local-level series: coverage of the posterior, and a gain over single values."""
    rng = np.random.default_rng(2)
    clock = np.cumsum(rng.uniform(0.5, 1.5, 400))
    walk = np.cumsum(rng.standard_normal(400) * 0.1 * np.sqrt(np.diff(clock, prepend=0)))
    errors = rng.uniform(0.2, 0.6, 400)
    mean, sd = smoothed_walk(clock, walk + errors * rng.standard_normal(400), errors)
    pull = (mean - walk) / sd
    assert 0.85 < pull.std() < 1.15
    assert np.std(mean - walk) < 0.6 * np.sqrt(np.mean(errors**2))


@pytest.mark.parametrize("level", (4.0, 8.0, 16.0))
def test_phases_and_frequencies_from_agreement_have_true_errors(
    quiet: Record, level: float
) -> None:
    rng = np.random.default_rng(7)
    off: dict[int, list[np.ndarray]] = {1: [], 2: []}
    for seed in range(5):
        phase = 0.2 * rng.standard_normal(len(quiet))
        frequency = 0.3 * rng.standard_normal(len(quiet))
        record = spoilt(quiet, level, 10 + seed, frequency, np.exp(-1j * phase))
        factors = shot_factors(record, ShotConsistency(frequency=True, rounds=4))
        off[1].append((factors.phase_rad + phase) / factors.error(1))
        off[2].append((factors.frequency_Hz - frequency) / factors.error(2))
    for pull in (np.concatenate(off[1]), np.concatenate(off[2])):
        assert 0.8 < pull.std() < 1.25 and 0.56 < np.mean(np.abs(pull) < 1) < 0.8
        assert abs(pull.mean()) * np.sqrt(pull.size) < 4


def test_agreement_without_noise_is_limited_by_the_model(quiet: Record) -> None:
    """Voxels of 4 µm and a view without surroundings leave less than 0.02 rad."""
    phase = 0.2 * np.random.default_rng(7).standard_normal(len(quiet))
    record = spoilt(quiet, 0.1, 1, factor=np.exp(-1j * phase))
    factors = shot_factors(record, ShotConsistency(rounds=4))
    assert np.std(factors.phase_rad + phase) < 0.02


@pytest.mark.parametrize("level", LEVELS)
def test_decay_is_found_within_its_error(quiet: Record, level: float) -> None:
    clock = quiet.protocol.clock_time
    found = []
    for seed, lost in ((0, 0.2), (1, 0.4), (2, 0.0), (3, 0.3)):
        factor = np.exp(np.log1p(-lost) * clock / clock.max())
        record = spoilt(quiet, level, seed, factor=factor)
        decay = measure_decay(record.protocol, shot_factors(record, ShotConsistency(rounds=2)))
        found.append((decay.lost.value - 100 * lost) / decay.lost.standard_error)
        assert decay.lost.standard_error < 15
    assert np.abs(found).max() < 3.5 and np.mean(np.abs(found)) < 2


def test_shots_that_show_nothing_are_said_to_tell_nothing(quiet: Record) -> None:
    """Noise alone: nothing is corrected, and one line says so."""
    rng = np.random.default_rng(0)
    noise = rng.standard_normal((*quiet.shape, 2)).view(complex)[..., 0] * quiet.noise_sd
    empty = Record.from_arrays(
        quiet.instrument,
        quiet.protocol,
        noise / np.sqrt(2),
        quiet.description_json,
        noise_sd=quiet.noise_sd,
    )
    found = calibrate(empty, settings=Calibration(geometry=None))
    assert found.factors is None and "overlap too little" in found.lines[0]
    assert not found.phase_rad.any() and np.ptp(found.frequency_Hz) < 1e-3
    assert np.median(found.drift.raw_error_Hz) > 1e3


def test_decay_needs_time_and_shots(quiet: Record) -> None:
    factors = shot_factors(quiet, ShotConsistency(rounds=1))
    still = replace(quiet.protocol, clock_time=np.zeros(24))
    with pytest.raises(InputError, match="do not show a decay"):
        measure_decay(still, factors)


def test_shrinking_leaves_signal_and_drops_noise() -> None:
    rng = np.random.default_rng(0)
    errors = np.full(4000, 0.5)
    truth = rng.standard_normal(4000)
    measured = truth + errors * rng.standard_normal(4000)
    assert np.mean((shrunk(measured, errors) - truth) ** 2) == pytest.approx(0.2, rel=0.1)
    assert np.abs(shrunk(0.5 * rng.standard_normal(4000), errors)).max() < 0.25
    size, error = excess(measured, errors)
    assert abs(size - 1) < 4 * error


def test_the_whole_calibration_recovers_a_spoilt_record(tmp_path: Path) -> None:
    flaws = replace(Imperfections.typical(), polarisation_decay=0.3)
    counts, truth = counted(tmp_path / "c.h5", flaws, photons=2e6)
    done = convert(counts)
    found = calibrate(done.record)
    assert np.std(found.frequency_Hz - truth.frequency_Hz) < 0.2 * 4.0
    assert found.decay is not None
    assert abs(found.decay.lost.value - 30) < 4 * found.decay.lost.standard_error + 2
    options = SimulationOptions(photon_noise=NoNoise())
    ideal = simulate(specimen(), counts.instrument, done.record.protocol, options=options)
    field = ideal.samples_in_memory() * found.record.protocol.amplitude[:, None, None, None]
    good = done.channels.good

    def misfit(record: Record) -> float:
        off = (record.samples_in_memory() - field)[..., good]
        return float(np.mean(np.abs(off) ** 2) / record.noise_sd**2)

    assert misfit(found.record) < 1.3
    assert misfit(found.record) - 1 < 0.2 * (misfit(done.record) - 1)


def test_fixed_values_are_kept(quiet: Record) -> None:
    truth = np.full(len(quiet), 1.5)
    record = spoilt(quiet, 1.0, 3, truth)
    fixed = Fixed(field_offset_Hz=1.5, polarisation_lost_percent=10.0)
    found = calibrate(record, settings=Calibration(fixed=fixed))
    assert found.drift is None and np.array_equal(found.frequency_Hz, truth)
    assert found.decay is not None and found.decay.lost.fixed
    amplitude = np.abs(found.record.protocol.amplitude / record.protocol.amplitude)
    assert amplitude[-1] / amplitude[0] == pytest.approx(0.9)


def test_calibrate_as_a_user_runs_it(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    counted(tmp_path / "c.h5", Imperfections.typical())
    main(["calibrate", "c.h5", "-o", "r.h5"])
    text = capsys.readouterr().out
    for name in ("usable channels", "response to a known field", "drift of the nuclear frequency"):
        assert name in text
    facts = json.loads((tmp_path / "calibration/calibration.json").read_text())
    assert facts["carrier"]["zone"] > 0 and len(facts["shots"]["frequency_Hz"]) == 24
    assert all((tmp_path / "calibration" / f"{n}.png").exists() for n in ("verdicts", "shots"))
    assert len(Record.open("r.h5")) == 24
    main(["convert", "c.h5", "-o", "plain.h5"])
    assert "carrier" in capsys.readouterr().out
    main(["show", "c.h5"])
    assert "photon counts: 24 rows" in capsys.readouterr().out
    (tmp_path / "fixed.toml").write_text("polarisation_lost_percent = 120.0\n")
    with pytest.raises(SystemExit) as left:
        main(["calibrate", "c.h5", "--fixed", "fixed.toml", "-o", "x.h5"])
    assert left.value.code == 2
    assert capsys.readouterr().err.count("\n") == 1 and not (tmp_path / "x.h5").exists()
