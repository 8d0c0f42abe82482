"""Spectral bases: what a unit of each unknown contributes to the samples' time axis."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from recon.instrument import Instrument
from recon.physics.magnetisation import polarised_magnetisation, thermal_polarisation
from recon.protocol import Protocol
from recon.specimen import Species

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


def species_basis(
    species: Sequence[Species], instrument: Instrument, protocol: Protocol
) -> ComplexArray:
    """Φ (times, species): magnetisation over time in A/m per mM of each species.

    φ_s(t) = N_A n_s (γħP_s/2) exp(−i 2π (δ_s − δ_ref)·1e-6·f t − t/T2*_s), with n_s nuclei per
    molecule, polarisation P_s (thermal where none is stated) and Larmor frequency f.
    """
    shift = np.array([one.shift_ppm for one in species]) - protocol.reference_shift_ppm
    frequency = shift * 1e-6 * instrument.larmor_frequency
    decay = 1 / np.array([one.t2_star for one in species])
    rate = (decay + 2j * np.pi * frequency).astype(complex)
    courses: ComplexArray = np.exp(-protocol.sample_times[:, None] * rate)
    return courses * magnetisation_per_mM(species, instrument)


def magnetisation_per_mM(species: Sequence[Species], instrument: Instrument) -> FloatArray:  # noqa: N802
    """Magnetisation of 1 mM of each species, (species,), A/m."""
    field = float(np.linalg.norm(instrument.bias_field))
    thermal = thermal_polarisation(field, instrument.temperature)
    return np.array(
        [
            polarised_magnetisation(
                constants.N_A * one.equivalent_nuclei,
                thermal if one.polarisation is None else one.polarisation,
            )
            for one in species
        ]
    )


def time_basis(protocol: Protocol) -> ComplexArray:
    """The identity (times, times): every time point is an unknown of its own, in A/m."""
    return np.eye(len(protocol.sample_times), dtype=complex)
