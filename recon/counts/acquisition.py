"""How counts are taken: frames in windows, what a count is worth, the calibration tone.

Each sample of a shot is a *window* of `frames_per_window` frames, `frame_interval_us` apart, that
begins at the protocol's sample time. A frame is a pair of counts per channel, signal and
reference, each the sum over the readouts that the frame accumulates. With B(t) the complex field
about the carrier f₀, the sensor sees the real field at the frame's time,

    b(t) = Re[B(t) exp(−i 2π f₀ t)],

which the frame rate folds: the frames oscillate at the alias of f₀.
"""
# ruff: noqa: N815 (unit symbols in field names keep their case)

from __future__ import annotations

from typing import Annotated

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from recon.band import Alias, alias_of
from recon.errors import InputError
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.toml import Count, Description, Number

FloatArray = NDArray[np.floating]
Positive = Annotated[Number, Field(gt=0)]
NotNegative = Annotated[Number, Field(ge=0)]


class Tone(Description):
    """A field of known amplitude that is on during every shot, in step with its start.

    The field along the sensing axis is amplitude · cos(2π (f₀ + offset) t), the same in all
    channels. The offset must keep it clear of the lines and of the mains.
    """

    amplitude_nT: Positive
    offset_Hz: Number
    relative_error: NotNegative = 0.0

    @property
    def amplitude(self) -> float:
        """Amplitude, tesla."""
        return self.amplitude_nT / 1e9


class Acquisition(Description):
    """Frames, counts and tone.

    Attributes
    ----------
    frame_interval_us
        Time between frames.
    frames_per_window
        Frames that become one complex sample; at least 6.
    photons_per_count
        Photons that raise the count by one.
    count_offset
        Count without light.
    full_scale_count
        Highest count; a channel that reaches it is saturated.
    read_noise_photons
        Standard deviation of one count from the electronics, in photons.
    carrier_Hz
        f₀; the Larmor frequency if not given.
    mains_Hz
        Nominal frequency of pickup lines; 0 for none.
    mains_harmonics
        Which multiples of it are looked for and removed.
    tone
        The calibration tone, or None.
    """

    frame_interval_us: Positive
    frames_per_window: Annotated[Count, Field(ge=6)]
    photons_per_count: Positive = 1.0
    count_offset: NotNegative = 0.0
    full_scale_count: Annotated[Count, Field(ge=1)] = 65535
    read_noise_photons: NotNegative = 0.0
    carrier_Hz: Positive | None = None
    mains_Hz: NotNegative = 0.0
    mains_harmonics: tuple[Annotated[Count, Field(ge=1)], ...] = (1, 2, 3, 5, 7)
    tone: Tone | None = None

    @property
    def frame_interval(self) -> float:
        """Time between frames, seconds."""
        return self.frame_interval_us / 1e6

    @property
    def window(self) -> float:
        """Duration of a window, seconds."""
        return self.frames_per_window * self.frame_interval

    @property
    def window_centre(self) -> float:
        """Middle of a window's frames after its first frame, seconds."""
        return (self.frames_per_window - 1) * self.frame_interval / 2

    def carrier(self, instrument: Instrument) -> float:
        """f₀, Hz."""
        return instrument.larmor_frequency if self.carrier_Hz is None else self.carrier_Hz

    def alias(self, instrument: Instrument) -> Alias:
        """Where the carrier appears among the frames, and the zone it folds from."""
        return alias_of(self.carrier(instrument), 1 / self.frame_interval)

    def frame_times(self, protocol: Protocol) -> NDArray[np.float64]:
        """Time of every frame after excitation, (windows, frames per window), seconds."""
        within = np.arange(self.frames_per_window) * self.frame_interval
        return np.asarray(protocol.sample_times[:, None] + within)

    def readouts_per_frame(self, instrument: Instrument) -> float:
        """Readouts that a frame accumulates, so that a window takes both quadratures' readouts."""
        return 2 * instrument.readout.readouts_per_sample / self.frames_per_window

    def check(self, instrument: Instrument, protocol: Protocol) -> None:
        """Refuse frames from which samples cannot be made.

        Raises
        ------
        InputError
            Windows overlap, or carrier or tone folds so near to zero or half the frame rate that
            a window does not tell its two quadratures apart.
        """
        times = protocol.sample_times
        if len(times) > 1 and self.window > np.diff(times).min() * (1 + 1e-9):
            raise InputError(
                f"a window of {self.window * 1e3:g} ms is longer than the "
                f"{np.diff(times).min() * 1e3:g} ms between samples",
                "acquisition",
                "use fewer frames per window or a shorter frame_interval_us",
            )
        self._check_alias("carrier", self.carrier(instrument))

    def _check_alias(self, name: str, frequency: float) -> None:
        rate = 1 / self.frame_interval
        alias = alias_of(frequency, rate).frequency
        least = min(alias, rate / 2 - alias)
        if least * self.window < 0.5:
            raise InputError(
                f"the {name} at {frequency:.6g} Hz folds to {alias:.4g} Hz under {rate:.6g} frames "
                "per second, where a window does not tell its quadratures apart",
                "acquisition.frame_interval_us",
                "choose an interval that folds it near a quarter of the frame rate",
            )

    def frame_angles(self, instrument: Instrument, protocol: Protocol) -> NDArray[np.float64]:
        """2π f₀ t of every frame modulo 2π, (windows, frames per window), rad."""
        turns = self.carrier(instrument) * self.frame_times(protocol)
        return np.asarray(2 * np.pi * (turns - np.floor(turns)))
