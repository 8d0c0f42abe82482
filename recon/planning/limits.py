"""What the apparatus and the clock allow: which wavevectors, and how long a shot takes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.instrument import Instrument
from recon.physics.magnetisation import GYROMAGNETIC_RATIO

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
    """

    base_duration_s: float = 1.0
    slew_T_per_m_s: float = 1e4  # noqa: N815
    largest_duty_cycle: float = 0.1

    def __post_init__(self) -> None:
        if not (self.base_duration_s > 0 and self.slew_T_per_m_s > 0):
            raise InputError("base_duration_s and slew_T_per_m_s must be positive", "limits")
        if not 0 < self.largest_duty_cycle <= 1:
            raise InputError("largest_duty_cycle must lie between 0 and 1", "limits")

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

    def shot_time(self, instrument: Instrument, nuclear: FloatArray) -> FloatArray:
        """Duration of a shot, (…), seconds."""
        return self.base_duration_s + self.pulse_time(instrument, nuclear)

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
