"""What goes wrong in an apparatus, with the sizes that are typical (common practice).

Each imperfection is a number or a map; `Imperfections()` has none of them and `typical()` all.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError

FloatArray = NDArray[np.float32]


@dataclass(frozen=True)
class Imperfections:
    """Sizes; 0 is none.

    Attributes
    ----------
    laser_noise
        Relative standard deviation of the light from frame to frame.
    laser_drift
        Relative change of the light over the record: half of it a ramp, half a slow wave.
    bleaching
        Share of the light lost by the end of the record, exponentially.
    vignetting
        Light lost at the corners relative to the middle.
    contrast_spread
        Relative standard deviation of the contrast over channels, smooth over a few pixels.
    phase_spread_rad
        Standard deviation of the channels' own phase, smooth likewise.
    hot_share, dead_share
        Share of pixels with a dark current of half the light, and without any light.
    saturated_share
        Share of pixels that stand at full scale.
    pickup
        Amplitude of the mains' first multiple relative to the light; the h-th has 1/h of it.
    mains_offset_Hz
        How far the mains are from their nominal frequency.
    field_drift_Hz
        Change of the nuclear frequency over the record: half a ramp, half a slow wave.
    field_walk_Hz
        Standard deviation of the nuclear frequency from row to row, on top.
    timing_jitter_rad
        Standard deviation of each row's start, as phase of the carrier.
    common_field_noise
        Field noise that all channels share, relative to one frame's noise of one channel.
    polarisation_decay
        Share of the magnetisation lost by the end of the record, exponentially.
    """

    laser_noise: float = 0.0
    laser_drift: float = 0.0
    bleaching: float = 0.0
    vignetting: float = 0.0
    contrast_spread: float = 0.0
    phase_spread_rad: float = 0.0
    hot_share: float = 0.0
    dead_share: float = 0.0
    saturated_share: float = 0.0
    pickup: float = 0.0
    mains_offset_Hz: float = 0.0  # noqa: N815
    field_drift_Hz: float = 0.0  # noqa: N815
    field_walk_Hz: float = 0.0  # noqa: N815
    timing_jitter_rad: float = 0.0
    common_field_noise: float = 0.0
    polarisation_decay: float = 0.0

    def __post_init__(self) -> None:
        for one in fields(self):
            value = getattr(self, one.name)
            if not np.isfinite(value):
                raise InputError(f"{one.name} is not finite", "imperfections")
            shared = one.name.endswith("_share") or one.name in ("bleaching", "polarisation_decay")
            if shared and not 0 <= value < 1:
                raise InputError(f"{one.name} must lie from 0 to below 1", "imperfections")

    @classmethod
    def typical(cls) -> Imperfections:
        """All of them at the size one expects of a working apparatus."""
        return cls(
            laser_noise=2e-3,
            laser_drift=0.05,
            bleaching=0.1,
            vignetting=0.3,
            contrast_spread=0.05,
            phase_spread_rad=0.05,
            hot_share=0.002,
            dead_share=0.01,
            saturated_share=0.001,
            pickup=2e-4,
            mains_offset_Hz=0.08,
            field_drift_Hz=3.0,
            field_walk_Hz=0.2,
            timing_jitter_rad=0.2,
            common_field_noise=0.2,
            polarisation_decay=0.2,
        )

    def light(self, share: float) -> float:
        """Light at a share of the record gone by, relative to its start."""
        drift = self.laser_drift * (share + np.sin(2 * np.pi * share)) / 2
        return float((1 + drift) * np.exp(share * np.log1p(-self.bleaching)))

    def field(self, share: float) -> float:
        """Offset of the nuclear frequency at a share of the record gone by, Hz, less its walk."""
        return float(self.field_drift_Hz * (share + np.sin(2 * np.pi * share) / 2) / 1.5)

    def polarisation(self, share: float) -> float:
        """Magnetisation left at a share of the record gone by."""
        return float(np.exp(share * np.log1p(-self.polarisation_decay)))


@dataclass(frozen=True, eq=False)
class ChannelFlaws:
    """True maps of one apparatus, (channels y, channels x) each.

    `light` and `contrast` relative to the description, `phase` in rad, `dark` the dark current
    relative to the light; `dead` and `saturated` masks.
    """

    light: FloatArray
    contrast: FloatArray
    phase: FloatArray
    dark: FloatArray
    dead: NDArray[np.bool_]
    saturated: NDArray[np.bool_]

    @classmethod
    def draw(
        cls, flaws: Imperfections, shape: tuple[int, int], random: np.random.Generator
    ) -> ChannelFlaws:
        """Draw them."""
        rows, columns = shape
        y = np.linspace(-1, 1, rows)[:, None] if rows > 1 else np.zeros((1, 1))
        x = np.linspace(-1, 1, columns) if columns > 1 else np.zeros(1)
        light = 1 - flaws.vignetting * (x**2 + y**2) / 2
        chance = random.random(shape)
        edges = np.cumsum([flaws.dead_share, flaws.hot_share, flaws.saturated_share])
        hot = (chance >= edges[0]) & (chance < edges[1])
        return cls(
            np.asarray(light, np.float32),
            1 + np.float32(flaws.contrast_spread) * _smooth(shape, random),
            np.float32(flaws.phase_spread_rad) * _smooth(shape, random),
            np.where(hot, np.float32(0.5), np.float32(0)),
            chance < edges[0],
            (chance >= edges[1]) & (chance < edges[2]),
        )


def _smooth(shape: tuple[int, int], random: np.random.Generator) -> FloatArray:
    """A smooth random map of mean 0 and standard deviation 1 (zeros for a single channel)."""
    if shape[0] * shape[1] == 1:
        return np.zeros(shape, np.float32)
    wave = np.hypot(*np.meshgrid(*(np.fft.fftfreq(n) * n for n in shape), indexing="ij"))
    spectrum = np.fft.fft2(random.standard_normal(shape)) * np.exp(-((wave / 4) ** 2))
    values = np.fft.ifft2(spectrum).real
    values -= values.mean()
    return np.asarray(values / values.std(), np.float32)
