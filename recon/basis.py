"""Spectral bases: what a unit of each unknown contributes to the samples' time axis."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from recon.errors import InputError
from recon.instrument import Instrument
from recon.physics.magnetisation import polarised_magnetisation, thermal_polarisation
from recon.physics.spins import LineList, time_signal
from recon.protocol import Protocol
from recon.species_table import SpinSpecies, species_named
from recon.specimen import Species

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
AVERAGED = 6


def species_basis(
    species: Sequence[Species], instrument: Instrument, protocol: Protocol, evolution: float = 0.0
) -> ComplexArray:
    """Φ (times, species): magnetisation over time in A/m per mM of each species.

    `evolution` seconds are added to the protocol's sample times.

    φ_s(t) = N_A n_s (γħP_s/2) c_s(t), with n_s nuclei per molecule, polarisation P_s (thermal where
    none is stated) and the time course c_s of `time_course`.
    """
    courses = [sampled_course(one, instrument, protocol, evolution) for one in species]
    return np.stack(courses, axis=1) * magnetisation_per_mM(species, instrument)


def sampled_course(
    species: Species, instrument: Instrument, protocol: Protocol, evolution: float = 0.0
) -> ComplexArray:
    """c(t) at a protocol's samples, averaged over each sample's duration, (times,).

    The average is by Gauss–Legendre quadrature of `AVERAGED` points, exact to 1e-6 for offsets up
    to 1/duration.
    """
    times, reference = protocol.sample_times + evolution, protocol.reference_shift_ppm
    if protocol.sample_duration == 0:
        return time_course(species, instrument, times, reference)
    places, weights = np.polynomial.legendre.leggauss(AVERAGED)
    spread = times + places[:, None] * protocol.sample_duration / 2
    courses = time_course(species, instrument, spread.ravel(), reference).reshape(spread.shape)
    return np.asarray(weights / 2 @ courses)


def time_course(
    species: Species, instrument: Instrument, times: FloatArray, reference_shift_ppm: float
) -> ComplexArray:
    """c(t), 1 at time 0, (times,): one line, or the exact lines of the species' spin system.

    One line: exp(−i 2π (δ − δ_ref)·1e-6·f t − t/T2*), f the Larmor frequency. A spin system: its
    lines at the bias field, strong coupling kept, over the number of its protons, times
    exp(−t/T2*).

    Raises
    ------
    InputError
        The table has no such species, or it has another number of protons.
    """
    if species.spin_system is None:
        shift = (species.shift_ppm - reference_shift_ppm) * 1e-6
        rate = complex(1 / species.t2_star, 2 * np.pi * shift * instrument.larmor_frequency)
        return np.exp(-np.asarray(times) * rate)
    entry = _spin_species(species.spin_system)
    if entry.protons != species.equivalent_nuclei:
        raise InputError(
            f"states {species.equivalent_nuclei} equivalent nuclei, its spin system has "
            f"{entry.protons}",
            f"species '{species.name}'",
        )
    lines = entry.lines(instrument.larmor_frequency, reference_shift_ppm)
    return time_signal(lines, times, species.t2_star) / entry.protons


def species_lines(species: Species, instrument: Instrument, reference_shift_ppm: float) -> LineList:
    """The lines behind `time_course`: intensities add up to 1, decay rates include 1/T2*."""
    frequency = instrument.larmor_frequency
    if species.spin_system is None:
        offset = (species.shift_ppm - reference_shift_ppm) * 1e-6 * frequency
        return LineList(np.array([offset]), np.ones(1), np.array([1 / species.t2_star]))
    entry = _spin_species(species.spin_system)
    lines = entry.lines(frequency, reference_shift_ppm).scaled(1 / entry.protons)
    rates = lines.decay_rates + 1 / species.t2_star
    return LineList(lines.frequencies, lines.intensities, rates)


@cache
def _spin_species(name: str) -> SpinSpecies:
    return SpinSpecies.from_toml(name) if name.endswith(".toml") else species_named(name)


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


def all_times(protocol: Protocol) -> FloatArray:
    """Every time at which some shot is sampled, ascending; times closer than 1 ns are one."""
    times = protocol.sample_times[:, None] + protocol.evolutions[0]
    return np.unique(np.round(times, 9))


def time_basis(protocol: Protocol, evolution: float = 0.0) -> ComplexArray:
    """Rows of the identity (times, all times): every time is an unknown of its own, in A/m."""
    every = all_times(protocol)
    mine = np.round(protocol.sample_times + evolution, 9)
    return (mine[:, None] == every).astype(complex)
