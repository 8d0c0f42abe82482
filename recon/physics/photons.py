"""From photon counts to field: the optical readout of the sensor spins.

One readout of one quadrature gives counts with mean N0 (1 − (C/2)(1 − sin φ)) and Poisson
spread, where φ = 2π γ_e B τ η. Here N0 is the mean count of the *bright* state (sin φ = 1), C the
contrast between bright and dark, τ the sensing time and η the efficiency of the sensing
sequence. The working point is φ = 0, where the mean count is N0 (1 − C/2). N0 is taken as known,
i.e. the reference readouts are averaged until their own noise no longer counts.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import constants

FloatArray = NDArray[np.floating]

ELECTRON_FREQUENCY_PER_TESLA: float = (
    constants.physical_constants["electron gyromag. ratio in MHz/T"][0] * 1e6
)
"""|g_e| μ_B/h of the free electron, Hz/T (28.02495 GHz/T)."""


def phase_per_field(sensing_time: float, efficiency: float) -> float:
    """Sensor phase per field, 2π γ_e τ η, rad/T, for a sensing time in seconds."""
    return 2 * np.pi * ELECTRON_FREQUENCY_PER_TESLA * sensing_time * efficiency


def field_noise(photons: float, contrast: float, sensing_time: float, efficiency: float) -> float:
    """Standard deviation of one real quadrature of one readout, tesla.

    σ_B = √(1 − C/2) / (2π γ_e τ η (C/2) √N0), from the slope N0 C/2 and the Poisson variance
    N0 (1 − C/2) at the working point. N0 is the bright-state count. The often quoted form without
    √(1 − C/2) is the limit of small contrast; it is larger by C/4 at first order. Written with
    the mean count at the working point, N = N0 (1 − C/2), the same value is
    (1 − C/2) / (2π γ_e τ η (C/2) √N).

    Parameters
    ----------
    photons
        N0, bright-state counts of the readout; sum over readouts that are added.
    contrast
        C, from 0 to 1.
    sensing_time
        τ, s.
    efficiency
        η, from 0 to 1.
    """
    slope = phase_per_field(sensing_time, efficiency) * contrast / 2
    return float(np.sqrt((1 - contrast / 2) / photons) / slope)


def expected_counts(
    field: FloatArray, photons: float, contrast: float, sensing_time: float, efficiency: float
) -> FloatArray:
    """Mean counts N0 (1 − (C/2)(1 − sin φ)) of one quadrature's field in tesla, any shape.

    Parameters are those of `field_noise`.
    """
    phase = field * phase_per_field(sensing_time, efficiency)
    return np.asarray(photons * (1 - contrast / 2 * (1 - np.sin(phase))))


def field_from_counts(
    counts: FloatArray, photons: float, contrast: float, sensing_time: float, efficiency: float
) -> FloatArray:
    """The inverse of `expected_counts`, tesla, any shape.

    φ = arcsin((counts/N0 − 1)/(C/2) + 1). Counts outside N0 (1 − C) … N0 are clipped to that
    domain and fields beyond |φ| = π/2 fold back, so it is meant for counts whose own noise
    is well below N0 C/2. For noisier counts of weak fields see `weak_field_from_counts`.
    """
    sine = np.clip((counts / photons - 1) * (2 / contrast) + 1, -1, 1)
    return np.asarray(np.arcsin(sine) / phase_per_field(sensing_time, efficiency))


def weak_field_from_counts(
    counts: FloatArray, photons: float, contrast: float, sensing_time: float, efficiency: float
) -> FloatArray:
    """Small-signal inverse of `expected_counts`, tesla, any shape: φ in place of sin φ.

    Linear in the counts, hence without bias from their noise however few they are; a field
    of phase φ comes out smaller by the fraction φ²/6.
    """
    sine = (counts / photons - 1) * (2 / contrast) + 1
    return sine / phase_per_field(sensing_time, efficiency)


def counted_field(
    field: FloatArray,
    photons: float,
    contrast: float,
    sensing_time: float,
    efficiency: float,
    generator: np.random.Generator,
    normal_above: float,
) -> FloatArray:
    """One quadrature as counted: Poisson counts of the field, then `weak_field_from_counts`.

    Parameters
    ----------
    field
        True field of one quadrature, tesla, any shape.
    generator
        Source of the randomness.
    normal_above
        Mean count above which the normal distribution of equal mean and variance is drawn.
    """
    if photons * (1 - contrast / 2) <= normal_above:
        mean = expected_counts(field, photons, contrast, sensing_time, efficiency)
        counts = generator.poisson(mean).astype(np.float64)
        return weak_field_from_counts(counts, photons, contrast, sensing_time, efficiency)
    slope = phase_per_field(sensing_time, efficiency)
    sine = np.sin(field * slope)
    spread = np.sqrt((1 - contrast / 2 * (1 - sine)) / photons) * (2 / contrast)
    spread *= generator.standard_normal(field.shape, np.float32)
    return np.asarray((sine + spread) / slope)
