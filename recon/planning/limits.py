"""What the apparatus, the clock and diffusion allow.

Which wavevectors, how long a shot takes, how much signal is left.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.instrument import Instrument
from recon.physics.magnetisation import GYROMAGNETIC_RATIO
from recon.protocol import Protocol, SpectralAxis
from recon.specimen import Species

FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Limits:
    """Limits beyond the instrument's own gradient strengths.

    Attributes
    ----------
    base_duration_s
        Time of a shot without its gradient pulse: excitation, evolution, readout, recovery.
    slew_T_per_m_s
        Fastest change of the nuclear gradient.
    largest_duty_cycle
        Pulse time over shot time; the wires' heating is the user's own limit.
    excitations
        Excitations of one shot: 1 where one decay gives all samples, the number of samples on an
        indirect spectral axis, where each needs an evolution of its own (see `excitations_of`).
    pause_s
        Time that each excitation costs besides, such as its share of polarising anew.
    tick_s
        Excitations begin at multiples of this time; 0 for any time.
    """

    base_duration_s: float = 1.0
    slew_T_per_m_s: float = 1e4  # noqa: N815
    largest_duty_cycle: float = 0.1
    excitations: int = 1
    pause_s: float = 0.0
    tick_s: float = 0.0

    def __post_init__(self) -> None:
        if not (self.base_duration_s > 0 and self.slew_T_per_m_s > 0):
            raise InputError("base_duration_s and slew_T_per_m_s must be positive", "limits")
        if not 0 < self.largest_duty_cycle <= 1:
            raise InputError("largest_duty_cycle must lie between 0 and 1", "limits")
        if self.excitations < 1 or not (self.pause_s >= 0 and self.tick_s >= 0):
            raise InputError(
                "excitations must be positive, pause_s and tick_s not negative", "limits"
            )

    def pulse_time(self, instrument: Instrument, nuclear: FloatArray) -> FloatArray:
        """Shortest pulse that winds k (…, 3) along all axes at once, seconds.

        A trapezoid of area k/γ with the stated slew: its length is A/G + G/s once it reaches full
        strength G, else 2√(A/s).
        """
        strength = np.array(instrument.gradients.nuclear_strength_mT_per_m) * 1e-3
        strength = np.maximum(strength, np.finfo(float).tiny)
        area = np.abs(nuclear) / GYROMAGNETIC_RATIO
        full = area / strength + strength / self.slew_T_per_m_s
        short = 2 * np.sqrt(area / self.slew_T_per_m_s)
        return np.where(area >= strength**2 / self.slew_T_per_m_s, full, short).max(axis=-1)

    def shot_time(
        self, instrument: Instrument, nuclear: FloatArray, evolution: FloatArray | float = 0.0
    ) -> FloatArray:
        """Duration of a shot with all its excitations, (…), seconds."""
        one = self.base_duration_s + self.pulse_time(instrument, nuclear) + evolution
        one = one + self.pause_s
        if self.tick_s > 0:
            one = self.tick_s * np.ceil(one / self.tick_s - 1e-9)
        return np.asarray(self.excitations * one)

    def allowed(
        self, instrument: Instrument, nuclear: FloatArray, sensor: FloatArray
    ) -> NDArray[np.bool_]:
        """Which pairs k (…, 3) and q (…, 2) the gradients reach within pulse and duty limits."""
        pulse = self.pulse_time(instrument, nuclear)
        longest = instrument.gradients.nuclear_pulse_max_ms * 1e-3
        within = (np.abs(nuclear) <= instrument.nuclear_wavevector_limit).all(axis=-1)
        within &= (np.abs(sensor) <= instrument.sensor_wavevector_limit).all(axis=-1)
        within &= pulse <= longest * (1 + 1e-9)
        return within & (pulse <= self.largest_duty_cycle * (self.base_duration_s + pulse))


def excitations_of(protocol: Protocol) -> int:
    """Excitations that one average of a shot takes."""
    indirect = protocol.spectral_axis is SpectralAxis.EVOLVE_THEN_ENCODE
    return len(protocol.sample_times) if indirect else 1


@dataclass(frozen=True, eq=False)
class Loss:
    """What diffusion leaves of a pattern wound to k.

    exp(−D k² δ/3) of a pulse of length δ, and exp(−D k² t) at the times t at which the pattern is
    listened to: a mean power over times and species, for the choice of shots. Source: Stejskal &
    Tanner, J. Chem. Phys. 42:288 (1965).

    Attributes
    ----------
    diffusion
        D per species, m²/s.
    t2_star
        Per species, seconds.
    listened
        Times after the pulse, seconds; (0,) if the pattern is read at once.
    """

    instrument: Instrument
    limits: Limits
    diffusion: FloatArray
    t2_star: FloatArray
    listened: FloatArray

    @classmethod
    def of(
        cls,
        instrument: Instrument,
        limits: Limits,
        species: Sequence[Species],
        listened: FloatArray | None = None,
    ) -> Loss:
        """For the species of a specimen; the pattern is read at once unless listened to."""
        return cls(
            instrument,
            limits,
            np.array([one.diffusion for one in species]),
            np.array([one.t2_star for one in species]),
            np.zeros(1) if listened is None else np.asarray(listened, float),
        )

    def power_left(self, nuclear: FloatArray) -> FloatArray:
        """Share of the power for wavevectors k (shots, 3), (shots,)."""
        pulse = self.limits.pulse_time(self.instrument, nuclear)
        wave = np.linalg.norm(nuclear, axis=-1)
        left = np.zeros(len(nuclear))
        for diffusion, t2 in zip(self.diffusion, self.t2_star, strict=True):
            plain = np.exp(-2 * self.listened / t2)
            decay = np.exp(-2 * np.outer(diffusion * wave**2, self.listened))
            during = np.exp(-2 * diffusion * wave**2 * pulse / 3)
            left += during * (decay @ plain) / plain.sum()
        return left / len(self.diffusion)
