"""Diffusion against random walkers and closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from recon.physics.diffusion import (
    lateral_decay,
    line_width,
    pulse_attenuation,
    restricted_signal,
    slab_propagator,
)

D = 2.3e-9
RNG = np.random.default_rng(0)


def walk(start, thickness, diffusion, time, steps=400):
    """Independent particles between two reflecting walls."""
    z = start.copy()
    step = np.sqrt(2 * diffusion * time / steps)
    for _ in range(steps):
        z += step * RNG.standard_normal(len(z))
        z = np.abs(z)
        z = thickness - np.abs(thickness - z)
    return z


def test_free_pattern_decays_as_walkers_do():
    u, t = 2 * np.pi / 10e-6, 2e-3
    end = np.sqrt(2 * D * t) * RNG.standard_normal(200_000)
    assert np.exp(1j * u * end).mean().real == pytest.approx(lateral_decay(u, D, t), abs=0.005)


def test_line_width_times_voxel_squared_is_pi_d():
    """The width of the Lorentzian whose signal decays at D(π/voxel)², found on its spectrum."""
    voxel = 10e-6
    rate = D * (np.pi / voxel) ** 2
    frequency = np.linspace(0, 200, 200_001)
    spectrum = 1 / (1 + (2 * np.pi * frequency / rate) ** 2)
    half = frequency[np.argmin(np.abs(spectrum - 0.5))]
    assert line_width(D, voxel) == pytest.approx(2 * half, rel=1e-3)
    assert line_width(D, voxel) * voxel**2 == pytest.approx(np.pi * D)
    assert line_width(D, voxel) == pytest.approx(72, abs=0.5)


@pytest.mark.parametrize("time", [1e-4, 2e-3, 2e-2, 1.0])
def test_slab_against_walkers(time):
    """Shares in six layers of a closed 24 µm slab, from each layer."""
    count, thickness = 6, 24e-6
    matrix = slab_propagator(count, thickness, D, time)
    assert matrix.sum(axis=0) == pytest.approx(1)
    np.testing.assert_allclose(matrix, matrix.T, atol=1e-12)
    for layer in (0, 3):
        start = (layer + RNG.random(60_000)) * thickness / count
        end = walk(start, thickness, D, time)
        shares = np.histogram(end, count, (0, thickness))[0] / len(end)
        np.testing.assert_allclose(matrix[:, layer], shares, atol=0.008)


def test_propagators_compose():
    """Two steps equal one of twice the time where the layers resolve them."""
    fine = slab_propagator(200, 24e-6, D, 2e-3)
    twice = slab_propagator(200, 24e-6, D, 4e-3)
    np.testing.assert_allclose(fine @ fine, twice, atol=2e-5)


def test_closed_slab_plateaus():
    """4/π² at k = π/a after long times; walkers in between; free decay at short times."""
    a = 10e-6
    k = np.pi / a
    assert restricted_signal(k, a, D, 1e3) == pytest.approx(4 / np.pi**2)
    t = 5e-3
    start = RNG.random(100_000) * a
    end = walk(start, a, D, t)
    assert restricted_signal(k, a, D, t).real == pytest.approx(
        np.exp(1j * k * (end - start)).mean().real, abs=0.006
    )
    assert restricted_signal(k, a, D, 0.0).real == pytest.approx(1, abs=3e-3)


def test_pulses_attenuate_as_walkers_do():
    """A constant gradient for δ: walkers gather ∫ g(t) z dt."""
    k, pulse, steps = 2 * np.pi / 8e-6, 3e-4, 300
    z = np.zeros(60_000)
    phase = np.zeros_like(z)
    for _ in range(steps):
        z += np.sqrt(2 * D * pulse / steps) * RNG.standard_normal(len(z))
        phase += k * z / steps
    # referred to where they end: the pattern that is left at the end of the pulse
    left = np.exp(1j * (phase - k * z)).mean().real
    assert left == pytest.approx(pulse_attenuation(k, D, pulse), abs=0.01)
