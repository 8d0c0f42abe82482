"""Counts to tesla: against the field that was counted, and one imperfection at a time."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from recon.counts import CountsRecord, convert
from recon.counts.channel_state import State
from recon.counts.conversion import Settings
from recon.counts.demodulation import Demodulator, Line
from recon.counts.reference import EveryFrame, LaserTimesChannel, WindowMean
from recon.errors import InputError
from recon.simulate import NoNoise, SimulationOptions, simulate
from recon.simulate.imperfections import Imperfections
from tests.counting import acquisition, counted, instrument, protocol, specimen


def true_samples(record) -> np.ndarray:
    """The field at the converted record's own times, from the other simulator."""
    quiet = SimulationOptions(photon_noise=NoNoise())
    return simulate(
        specimen(), record.instrument, record.protocol, options=quiet
    ).samples_in_memory()


def test_samples_are_the_field_within_their_noise(tmp_path: Path) -> None:
    counts, _ = counted(tmp_path / "c.h5")
    done = convert(counts, tmp_path / "r.h5")
    record = done.record
    truth = true_samples(record)
    off = record.samples_in_memory() - truth
    chi = np.mean(np.abs(off) ** 2) / record.noise_sd**2
    degrees = 2 * off.size
    assert abs(chi - 1) < 5 * np.sqrt(2 / degrees) + 0.01
    scale = np.vdot(truth, record.samples_in_memory()) / np.vdot(truth, truth)
    error = record.noise_sd / np.linalg.norm(truth)
    assert abs(scale - 1) < 4 * error + 2e-3
    # the noise is that of the description (docs of physics.photons), but for the tone's line
    assert record.noise_sd == pytest.approx(record.instrument.field_noise, rel=0.03)
    assert record.channel_weight is None
    assert np.allclose(
        record.protocol.sample_times,
        counts.protocol.sample_times + counts.acquisition.window_centre,
    )


def test_the_window_dims_a_line_off_the_carrier(tmp_path: Path) -> None:
    """A line ν off the carrier loses sinc(ν · window): the mean of a turning phasor."""
    apparatus = instrument()
    table = replace(protocol(2), sample_duration=2e-3)
    from recon.basis import sampled_course, time_course

    fat = specimen().species[1]
    averaged = sampled_course(fat, apparatus, table)
    plain = time_course(fat, apparatus, table.sample_times, table.reference_shift_ppm)
    offset = (fat.shift_ppm - 4.7) * 1e-6 * apparatus.larmor_frequency
    rate = 1 / fat.t2_star + 2j * np.pi * offset
    expected = np.sinh(rate * 1e-3) / (rate * 1e-3)
    assert np.allclose(averaged / plain, expected, rtol=1e-9)
    assert abs(abs(expected) - abs(np.sinc(offset * 2e-3))) < 1e-3


def test_least_squares_rejects_the_image_that_mixing_leaves() -> None:
    """With an alias that is no whole number of turns per window, a mixer followed by a mean leaves
    the image at twice the alias (Lyons, Understanding Digital Signal Processing, 2010, ch. 8).
    """
    apparatus = instrument()
    setup = acquisition(apparatus, frame_interval_us=131.07)
    table = protocol(2)
    demodulator = Demodulator.build(setup, apparatus, table)
    angle = setup.frame_angles(apparatus, table)
    field = (0.3 - 0.8j) * np.exp(-1j * angle)
    frames = (0.95 + field.real).astype(np.float32).reshape(-1, 1)
    samples, _ = demodulator.apply(frames)
    assert np.allclose(samples, 0.3 - 0.8j, atol=2e-5)
    mixed = 2 * (np.exp(1j * angle) * (frames.reshape(angle.shape) - 0.95)).mean(axis=1)
    assert np.abs(mixed - (0.3 - 0.8j)).max() > 0.01


def test_lines_over_the_shot_do_not_reach_the_samples() -> None:
    apparatus = instrument()
    setup, table = acquisition(apparatus), protocol(2)
    lines = [Line("tone", apparatus.larmor_frequency + 700.0), Line("mains", 150.2)]
    demodulator = Demodulator.build(setup, apparatus, table, lines)
    times = setup.frame_times(table).ravel()
    tone = 0.02 * np.cos(2 * np.pi * (lines[0].frequency * times % 1) - 0.4)
    hum = 0.05 * np.cos(2 * np.pi * 150.2 * times + 1.0)
    samples, amplitudes = demodulator.apply((1 + tone + hum).astype(np.float32)[:, None])
    assert np.abs(samples).max() < 1e-5
    assert amplitudes[0, 0] == pytest.approx(0.02 * np.exp(0.4j), abs=1e-5)
    assert abs(amplitudes[1, 0]) == pytest.approx(0.05, abs=1e-4)


def test_noise_of_samples_is_what_the_map_says() -> None:
    apparatus = instrument()
    setup, table = acquisition(apparatus), protocol(2)
    lines = [Line("tone", apparatus.larmor_frequency + 700.0)]
    demodulator = Demodulator.build(setup, apparatus, table, lines)
    frames = np.random.default_rng(0).standard_normal((12 * 16, 4000)).astype(np.float32)
    samples, amplitudes = demodulator.apply(frames)
    power = np.mean(np.abs(samples) ** 2)
    assert power == pytest.approx(demodulator.noise_factor, rel=0.02)
    assert np.var(amplitudes.real) == pytest.approx(demodulator.line_variance[0], rel=0.1)
    left = (demodulator.residuals(frames) ** 2).sum(axis=0).mean()
    assert left == pytest.approx(demodulator.freedom, rel=0.01)


def test_a_carrier_that_folds_to_zero_is_refused() -> None:
    apparatus = instrument()
    carrier = apparatus.larmor_frequency
    interval = round(carrier * 125e-6) / carrier
    setup = acquisition(apparatus, frame_interval_us=interval * 1e6, tone=None)
    with pytest.raises(InputError, match="folds to"):
        setup.check(apparatus, protocol(2))


@pytest.mark.parametrize("rule", [EveryFrame(), WindowMean(), LaserTimesChannel()])
def test_every_reference_takes_the_laser_out(rule) -> None:
    rng = np.random.default_rng(1)
    course = 1 + 0.05 * np.repeat(rng.standard_normal(12), 16)
    level = rng.uniform(500, 1500, 30)
    reference = (course[:, None] * level).astype(np.float32)
    signal = (0.95 * reference).astype(np.float32)
    rule.divide(signal, reference, 12)
    signal /= rule.left(reference.mean(axis=0))
    assert np.allclose(signal, 0.95, rtol=1e-5)


def test_laser_noise_calls_for_a_reference_per_frame_or_for_all_channels(tmp_path: Path) -> None:
    """All channels share one laser: the product rule removes its noise without adding any."""
    counts, _ = counted(tmp_path / "c.h5", Imperfections(laser_noise=5e-3), shots=6)
    noise = {
        rule: convert(counts, settings=Settings(rule)).record.noise_sd
        for rule in (LaserTimesChannel(), EveryFrame(), WindowMean())
    }
    chosen = convert(counts)
    assert isinstance(chosen.inspection.reference, LaserTimesChannel)
    assert noise[LaserTimesChannel()] < 1.1 * chosen.record.instrument.field_noise
    # photon noise of two counts in place of one: √2, for a small contrast
    assert noise[EveryFrame()] / noise[LaserTimesChannel()] == pytest.approx(np.sqrt(2), rel=0.05)
    assert noise[WindowMean()] > 1.5 * noise[LaserTimesChannel()]


def test_one_detector_converts(tmp_path: Path) -> None:
    counts, _ = counted(
        tmp_path / "c.h5",
        kind="one detector",
        photons=1e8,
        photons_per_count=1e3,
        full_scale_count=2**31,
    )
    done = convert(counts)
    truth = true_samples(done.record)
    off = done.record.samples_in_memory() - truth
    assert np.mean(np.abs(off) ** 2) / done.record.noise_sd**2 == pytest.approx(1, abs=0.2)


def test_bad_channels_are_found_and_named(tmp_path: Path) -> None:
    flaws = Imperfections(dead_share=0.03, saturated_share=0.02, hot_share=0.02)
    counts, truth = counted(tmp_path / "c.h5", flaws, shots=6)
    done = convert(counts)
    state = done.channels.state
    assert (state[truth.channels.dead] == State.DARK).all()
    assert (state[truth.channels.saturated] == State.SATURATED).all()
    others = ~(truth.channels.dead | truth.channels.saturated)
    assert (state[others] == State.GOOD).all()
    assert truth.channels.dead.any() and truth.channels.saturated.any()
    weight = done.record.channel_weight
    assert weight is not None and (weight[~others] == 0).all()
    hot = (truth.channels.dark > 0) & others
    assert hot.any() and (weight[hot] < 0.8 * np.median(weight)).all()
    assert np.array_equal(done.channels.warm, hot)
    assert "hot, with a dark current" in str(done.channels)


@pytest.mark.parametrize("photons", [1e5, 4e5, 1.6e6])
def test_the_mains_frequency_has_a_true_error(tmp_path: Path, photons: float) -> None:
    pull = []
    for seed in range(5):
        offset = (seed - 2) * 0.11
        flaws = Imperfections(pickup=3e-3, mains_offset_Hz=offset)
        counts, _ = counted(tmp_path / f"{seed}.h5", flaws, seed=seed, photons=photons, shots=8)
        pickup = convert(counts).inspection.pickup
        assert pickup is not None
        pull.append((pickup.frequency_Hz - 50 - offset) / pickup.standard_error_Hz)
    assert 0.2 < np.sqrt(np.mean(np.square(pull))) < 2.2


def test_pickup_is_found_with_its_error_and_removed(tmp_path: Path) -> None:
    flaws = Imperfections(pickup=2e-3, mains_offset_Hz=0.13)
    counts, _ = counted(tmp_path / "c.h5", flaws)
    done = convert(counts)
    pickup = done.inspection.pickup
    assert pickup is not None
    assert abs(pickup.frequency_Hz - 50.13) < 3 * pickup.standard_error_Hz
    off = done.record.samples_in_memory() - true_samples(done.record)
    cleaned = np.mean(np.abs(off) ** 2) / done.record.noise_sd**2
    kept = convert(counts, settings=Settings(mains=False))
    off = kept.record.samples_in_memory() - true_samples(kept.record)
    left_in = np.mean(np.abs(off) ** 2) / done.record.noise_sd**2
    assert cleaned < 1.03 < left_in
    clean, _ = counted(tmp_path / "clean.h5")
    assert convert(clean).inspection.pickup is None


def test_common_field_noise_is_found_and_projected_out(tmp_path: Path) -> None:
    counts, _ = counted(tmp_path / "c.h5", Imperfections(common_field_noise=0.5), shots=8)
    done = convert(counts)
    assert done.inspection.common.uniform
    assert done.inspection.common.share == pytest.approx(0.25 / 1.25, rel=0.2)
    truth = true_samples(done.record)
    still = ~done.record.protocol.sensor_wavevector.any(axis=1)
    kept = convert(counts, settings=Settings(common_noise=False))

    assert still.any()
    mean = truth[still].mean(axis=(2, 3), keepdims=True)
    left_in = kept.record.samples_in_memory()[still] - truth[still]
    taken_out = done.record.samples_in_memory()[still] - (truth[still] - mean)
    assert np.mean(np.abs(left_in.mean(axis=(2, 3))) ** 2) > 20 * np.mean(
        np.abs(taken_out.mean(axis=(2, 3))) ** 2
    )
    # the rest is untouched: what a uniform pattern holds is one channel's worth
    assert np.mean(np.abs(taken_out) ** 2) < np.mean(np.abs(left_in) ** 2)


def test_jitter_is_undone_by_the_tone(tmp_path: Path) -> None:
    counts, truth = counted(tmp_path / "c.h5", Imperfections(timing_jitter_rad=0.5), shots=8)
    done = convert(counts)
    found = -np.angle(done.rows.tone)
    assert np.abs(found + truth.jitter_rad).max() < 0.01 or (
        np.abs(found - truth.jitter_rad).max() < 0.01
    )
    off = done.record.samples_in_memory() - true_samples(done.record)
    assert np.mean(np.abs(off) ** 2) / done.record.noise_sd**2 < 1.03


@pytest.mark.parametrize("photons", [2e5, 6e5, 2e6])
def test_gain_and_phase_of_channels_are_unbiased_with_true_errors(
    tmp_path: Path, photons: float
) -> None:
    flaws = Imperfections(contrast_spread=0.1, phase_spread_rad=0.1, vignetting=0.3)
    counts, truth = counted(tmp_path / "c.h5", flaws, photons=photons)
    done = convert(counts)
    readout = counts.instrument.readout
    from recon.physics.photons import phase_per_field

    slope = phase_per_field(readout.sensing_time, readout.efficiency) * readout.contrast / 2
    expected = slope * truth.channels.contrast * np.exp(-1j * truth.channels.phase)
    # the rows' phase is the mean over channels: that much of the pattern is the reference
    turn = np.vdot(expected, done.channels.response)
    pull = (done.channels.response * np.conj(turn / abs(turn)) - expected) / (
        done.channels.response_error
    )
    assert abs(pull.real.mean()) < 5 / 16 + 0.3 and abs(pull.imag.mean()) < 5 / 16 + 0.3
    assert 0.85 < pull.real.std() < 1.15 and 0.85 < pull.imag.std() < 1.15
    inside = np.mean(np.abs(pull.real) < 1)
    assert 0.58 < inside < 0.78
    # noise of channels: √counts, so it grows as the light falls
    light = truth.channels.light * truth.channels.contrast**2
    predicted = 1 / np.sqrt(light)
    ratio = done.channels.noise / predicted
    assert ratio.std() / ratio.mean() < 0.1


def test_a_tone_that_is_not_there_is_one_line(tmp_path: Path) -> None:
    counts, _ = counted(tmp_path / "c.h5", tone=None, shots=4)
    from recon.counts.acquisition import Tone

    wrong = replace(
        counts,
        acquisition=counts.acquisition.model_copy(
            update={"tone": Tone(amplitude_nT=30.0, offset_Hz=700.0)}
        ),
    )
    with pytest.raises(InputError, match=r"tone .* is not there"):
        convert(wrong)
    done = convert(wrong, settings=Settings(tone=False))
    assert np.isnan(done.channels.response_error).all()
    assert isinstance(CountsRecord.open(counts.path), CountsRecord)
