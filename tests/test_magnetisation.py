"""Precession frequency and magnetisation against outside values."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import constants

from recon.physics.magnetisation import (
    curie_magnetisation,
    larmor_frequency,
    polarised_magnetisation,
    thermal_polarisation,
)

# Density of water at 25 °C, 997.05 kg/m³, and molar mass 18.0153 g/mol: CRC Handbook, from memory.
PROTONS_OF_WATER = 2 * constants.N_A * 997.05 / 18.0153e-3


def test_larmor_frequency_of_the_proton() -> None:
    """42.577 MHz/T: CODATA."""
    assert larmor_frequency(1.0) == pytest.approx(42.577e6, rel=2e-5)


def test_curie_magnetisation_of_water() -> None:
    """3.22e-4 A/m at 25 °C and 0.1 T, by hand from CODATA constants."""
    assert curie_magnetisation(PROTONS_OF_WATER, 0.1, 298.15) == pytest.approx(3.22e-4, rel=2e-3)


def test_thermal_magnetisation_from_the_static_susceptibility_of_protons() -> None:
    """Nuclear susceptibility of water about 4.0e-9 (SI) at room temperature: Abragam, from memory.

    B0/μ0 times it must be the Curie magnetisation, to the digits remembered.
    """
    magnetisation = curie_magnetisation(PROTONS_OF_WATER, 1.0, 298.15)
    assert magnetisation * constants.mu_0 == pytest.approx(4.0e-9, rel=0.03)


def test_thermal_polarisation_gives_the_curie_law_in_weak_fields() -> None:
    polarisation = thermal_polarisation(0.1, 298.15)
    thermal = polarised_magnetisation(PROTONS_OF_WATER, polarisation)
    assert thermal == pytest.approx(curie_magnetisation(PROTONS_OF_WATER, 0.1, 298.15), rel=1e-9)
    assert polarisation == pytest.approx(3.43e-7, rel=5e-3)  # h·4.2577 MHz / (2 k·298.15 K)


def test_polarisation_saturates_at_one() -> None:
    assert thermal_polarisation(1e6, 1e-3) == 1.0


def test_arrays_of_densities_keep_their_shape_and_type() -> None:
    density = np.full((2, 3), 1e28, np.float32)
    assert polarised_magnetisation(density, 0.01).dtype == np.float32
    assert curie_magnetisation(density, 0.1, 300.0).shape == (2, 3)
