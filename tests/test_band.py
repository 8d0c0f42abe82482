"""Aliased detection by name: bands, folds, images, against sampled oscillations."""

from __future__ import annotations

import warnings
from dataclasses import replace

import numpy as np
import pytest

from recon.band import Band, alias_of, warn_of_folds
from recon.basis import species_lines, time_course
from recon.demo import instrument
from recon.errors import InputError, InputWarning
from recon.protocol import Protocol
from recon.specimen import Species


def species(name: str, shift: float, **changes) -> Species:
    fields = {
        "name": name,
        "shift_ppm": shift,
        "equivalent_nuclei": 2,
        "t2_star_ms": 200.0,
        "t1_s": 1.0,
        "diffusion_um2_per_ms": 0.1,
    }
    return Species(**(fields | changes))


def table(dwell: float, count: int = 64, reference: float = 4.70) -> Protocol:
    return Protocol.plain(
        np.zeros((1, 3)),
        np.zeros((1, 2)),
        1,
        np.arange(count) * dwell,
        reference_shift_ppm=reference,
    )


@pytest.mark.parametrize("shift", [-2.0, 1.3, 4.7, 9.1])
def test_lines_appear_where_the_transform_of_their_samples_has_its_peak(shift):
    """A line sampled too slowly, and numpy's FFT of the samples."""
    protocol, one = table(30e-3, 256), species("a", shift)
    band = Band.of(instrument(), protocol)
    (line,) = band.lines([one], instrument())
    course = time_course(one, instrument(), protocol.sample_times, protocol.reference_shift_ppm)
    spectrum = np.abs(np.fft.fft(course.conj(), 4096))  # a line at +f turns as exp(−i 2π f t)
    peak = np.fft.fftfreq(4096, 30e-3)[spectrum.argmax()]
    assert band.distance(peak, line.inside) < 0.02
    mirrored = np.abs(np.fft.fft(course, 4096))
    image = np.fft.fftfreq(4096, 30e-3)[mirrored.argmax()]
    assert band.distance(image, line.image) < 0.02
    assert line.inside + line.folds * band.bandwidth == pytest.approx(line.offset)
    assert abs(line.inside) <= band.bandwidth / 2
    assert (line.folds == 0) == (band.limits_ppm[0] <= shift < band.limits_ppm[1])


@pytest.mark.parametrize("frequency", [310.0, 790.0, 1210.0, 10_650_123.0])
def test_real_samples_alias_and_turn_round(frequency):
    """A cosine sampled at 1 kHz, and numpy's FFT; a little higher it moves by zone."""
    rate, times = 1000.0, np.arange(4000) / 1000.0

    def peak(f):
        spectrum = np.abs(np.fft.rfft(np.cos(2 * np.pi * f * times)))
        return np.fft.rfftfreq(4000, 1 / rate)[spectrum.argmax()]

    alias = alias_of(frequency, rate)
    assert alias.frequency == pytest.approx(peak(frequency), abs=0.2)
    assert (peak(frequency + 20) < peak(frequency)) == alias.reversed


def test_folded_lines_are_named():
    """At 250 mT water and a line 2 ppm off lie 21 Hz apart: one bandwidth at 47 ms."""
    f = instrument().larmor_frequency
    other = species("acetone", 2.70)
    dwell = 1 / (2.0e-6 * f)
    with pytest.warns(InputWarning, match=r"water at 4.70 ppm and acetone at 2.70 ppm folded by"):
        warn_of_folds([species("water", 4.70), other], instrument(), table(dwell))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        warn_of_folds([species("water", 4.70), other], instrument(), table(dwell / 2.6))


def test_lines_that_lie_together_anyway_are_no_folds():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        pair = [species("a", 1.30), species("b", 1.31)]
        warn_of_folds(pair, instrument(), table(30e-3))


def test_common_step_of_an_undersampled_table():
    """Times 0, 8, 10, 18, 25, 33 ms have 1 ms in common."""
    protocol = replace(table(8e-3, 2), sample_times=np.array([0.0, 8e-3]))
    waves = np.zeros((3, 3))
    made = Protocol.plain(waves, waves[:, :2], 1, protocol.sample_times)
    made = replace(made, evolution_time=np.array([0.0, 10e-3, 25e-3]))
    band = Band.of(instrument(), made)
    assert band.dwell == pytest.approx(1e-3)
    assert band.duration == pytest.approx(33e-3)


def test_one_time_is_no_band():
    with pytest.raises(InputError, match="one sample time"):
        Band.of(instrument(), table(1e-3, 1))


def test_lines_make_the_time_course():
    """Lines of a spin system, summed, against its time course."""
    one = species("lactate", 1.31, spin_system="lactate", equivalent_nuclei=4)
    lines = species_lines(one, instrument(), 4.70)
    times = np.arange(32) * 4e-3
    summed = (
        np.exp(-np.outer(times, 2j * np.pi * lines.frequencies + lines.decay_rates))
        @ lines.intensities
    )
    np.testing.assert_allclose(summed, time_course(one, instrument(), times, 4.70), atol=1e-5)
