"""Nuclear magnetisation of protons: precession frequency, polarisation, absolute scale.

Constants are the CODATA values that scipy carries.
"""

from __future__ import annotations

from typing import TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy import constants

Real = TypeVar("Real", float, NDArray[np.floating])

GYROMAGNETIC_RATIO: float = constants.physical_constants["proton gyromag. ratio"][0]
"""γ of the free proton, rad/(s T)."""

_QUANTUM: float = GYROMAGNETIC_RATIO * constants.hbar
_BOLTZMANN: float = constants.k


def larmor_frequency(field_T: Real) -> Real:
    """Precession frequency of free protons γB/2π, Hz, in a field in tesla."""
    return field_T * (GYROMAGNETIC_RATIO / (2 * np.pi))


def thermal_polarisation(field: float, temperature: float) -> float:
    """Equilibrium polarisation of spins ½: tanh(γħB/2kT), unitless.

    Its limit at weak fields, γħB/2kT, gives the Curie law; at 0.1 T and room temperature the
    two differ by less than one part in 1e12.

    Parameters
    ----------
    field
        Magnetic flux density, T.
    temperature
        Absolute temperature, K.
    """
    return float(np.tanh(_QUANTUM * field / (2 * _BOLTZMANN * temperature)))


def curie_magnetisation(number_density: Real, field: float, temperature: float) -> Real:
    """Equilibrium magnetisation of spins ½ at weak field: N γ²ħ²B0/(4kT), A/m.

    Source: the Curie law, e.g. Abragam, The Principles of Nuclear Magnetism.

    Parameters
    ----------
    number_density
        Spins per cubic metre.
    field
        Magnetic flux density, T.
    temperature
        Absolute temperature, K.
    """
    return number_density * (_QUANTUM**2 * field / (4 * _BOLTZMANN * temperature))


def polarised_magnetisation(number_density: Real, polarisation: float) -> Real:
    """Magnetisation of spins ½ of a given polarisation P: N γħP/2, A/m.

    Parameters
    ----------
    number_density
        Spins per cubic metre; N_A · concentration (mol/m³) · equivalent nuclei.
    polarisation
        From 0 to 1.
    """
    return number_density * (_QUANTUM / 2 * polarisation)
