"""Optical transfer against a numerical pupil, and the pixel average."""

from __future__ import annotations

import numpy as np
import pytest

from recon.physics.optics import optical_transfer, pixel_footprint

APERTURE, WAVELENGTH = 0.8, 700e-9
CUTOFF = 2 * np.pi * 2 * APERTURE / WAVELENGTH


def test_transfer_agrees_with_the_autocorrelation_of_a_pupil() -> None:
    count = 1024
    axis = (np.arange(count) - count / 2) / (count / 4) * 1.02  # pupil radius 1, zero-padded
    pupil = (axis[:, None] ** 2 + axis**2 <= 1).astype(float)
    spectrum = np.abs(np.fft.fft2(pupil)) ** 2
    overlap = np.fft.ifft2(spectrum).real
    overlap /= overlap[0, 0]
    shift = np.arange(0, count // 2)
    ratio = shift * (axis[1] - axis[0]) / 2
    expected = optical_transfer(ratio * CUTOFF, APERTURE, WAVELENGTH)
    np.testing.assert_allclose(expected, overlap[0, shift], atol=2e-3)


def test_transfer_is_one_at_rest_and_zero_beyond_the_cutoff() -> None:
    wave = np.array([[0.0, CUTOFF], [1.5 * CUTOFF, 50 * CUTOFF]])
    np.testing.assert_allclose(
        optical_transfer(wave, APERTURE, WAVELENGTH), [[1, 0], [0, 0]], atol=1e-12
    )


def test_first_dark_ring_of_the_point_image_is_at_the_rayleigh_distance() -> None:
    """0.6098 λ/NA: the first zero of the Airy pattern (Goodman, Introduction to Fourier Optics)."""
    count, step = 512, 40e-9
    wave = 2 * np.pi * np.fft.fftfreq(count, step)
    transfer = optical_transfer(np.hypot(wave[:, None], wave), APERTURE, WAVELENGTH)
    fine = np.linspace(0.4, 0.8, 401) * WAVELENGTH / APERTURE
    profile = np.real(np.exp(1j * np.outer(fine, wave)) @ transfer.sum(0))
    assert fine[np.argmin(profile)] == pytest.approx(0.6098 * WAVELENGTH / APERTURE, rel=0.02)


def test_pixel_footprint_is_the_average_of_a_wave_over_the_pixel() -> None:
    height, width, ky, kx = 2e-6, 3e-6, 1.1e6, -0.7e6
    places = (np.arange(1000) + 0.5) / 1000 - 0.5
    wave = np.exp(1j * (ky * height * places[:, None] + kx * width * places))
    assert pixel_footprint(ky, kx, (height, width)) == pytest.approx(wave.mean().real, abs=1e-6)
    assert pixel_footprint(ky, kx, 2e-6) == pixel_footprint(ky, kx, (2e-6, 2e-6))


def test_pixel_footprint_broadcasts() -> None:
    assert pixel_footprint(np.zeros((4, 1)), np.zeros(3), 1e-6).shape == (4, 3)
