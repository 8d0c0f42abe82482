"""The readout formula against Monte-Carlo counts."""

from __future__ import annotations

import numpy as np
import pytest

from recon.physics.photons import (
    ELECTRON_FREQUENCY_PER_TESLA,
    expected_counts,
    field_from_counts,
    field_noise,
    phase_per_field,
    weak_field_from_counts,
)

READOUT = {"photons": 4e5, "contrast": 0.3, "sensing_time": 20e-6, "efficiency": 0.6}


def test_electron_frequency() -> None:
    """28.02495 GHz/T: CODATA."""
    assert pytest.approx(28.02495e9, rel=1e-6) == ELECTRON_FREQUENCY_PER_TESLA


@pytest.mark.parametrize("contrast", [0.02, 0.3, 0.9])
def test_noise_agrees_with_poisson_counts(contrast: float) -> None:
    readout = READOUT | {"contrast": contrast}
    generator = np.random.default_rng(3)
    counts = generator.poisson(expected_counts(np.zeros(200_000), **readout))
    spread = weak_field_from_counts(counts.astype(float), **readout).std()
    assert spread == pytest.approx(field_noise(**readout), rel=0.01)


def test_noise_of_the_exact_inverse_agrees_where_counts_are_many() -> None:
    readout = READOUT | {"photons": 1e8}
    counts = np.random.default_rng(4).poisson(expected_counts(np.zeros(200_000), **readout))
    spread = field_from_counts(counts.astype(float), **readout).std()
    assert spread == pytest.approx(field_noise(**readout), rel=0.01)


def test_noise_formula_means_bright_state_counts() -> None:
    """The common form without √(1 − C/2) would be 8 % too large at this contrast."""
    slope = phase_per_field(20e-6, 0.6) * 0.15
    bright = 1 / (slope * np.sqrt(READOUT["photons"]))
    assert field_noise(**READOUT) / bright == pytest.approx(np.sqrt(0.85))
    mean = float(expected_counts(np.zeros(1), **READOUT)[0])
    assert field_noise(**READOUT) == pytest.approx(0.85 / (slope * np.sqrt(mean)))


def test_counts_run_from_dark_to_bright() -> None:
    quarter = np.pi / 2 / phase_per_field(20e-6, 0.6)
    counts = expected_counts(np.array([-quarter, 0, quarter]), **READOUT)
    np.testing.assert_allclose(counts, [0.7 * 4e5, 0.85 * 4e5, 4e5])


def test_inverse_returns_the_field_and_clips_outside_its_domain() -> None:
    quarter = np.pi / 2 / phase_per_field(20e-6, 0.6)
    field = np.linspace(-0.99, 0.99, 21) * quarter
    np.testing.assert_allclose(
        field_from_counts(expected_counts(field, **READOUT), **READOUT), field, atol=1e-12
    )
    beyond = field_from_counts(np.array([0.0, 1e6]), **READOUT)
    np.testing.assert_allclose(beyond, [-quarter, quarter])


def test_weak_field_inverse_is_unbiased_where_counts_are_few() -> None:
    readout = READOUT | {"photons": 100.0, "contrast": 0.05}
    field = 0.1 / phase_per_field(20e-6, 0.6)
    generator = np.random.default_rng(5)
    counts = generator.poisson(expected_counts(np.full(400_000, field), **readout))
    found = weak_field_from_counts(counts.astype(float), **readout)
    error = field_noise(**readout) / np.sqrt(400_000)
    assert abs(found.mean() - field * (1 - 0.1**2 / 6)) < 4 * error
    assert found.std() == pytest.approx(field_noise(**readout), rel=0.01)
