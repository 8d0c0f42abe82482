"""What signal counts are divided by: three ways to read the reference.

Dividing each signal by its own reference doubles the photon noise. Where many channels see one
laser, reference(f, p) = l(f) r(p) uses all of them, and the noise of the reference vanishes.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol as Interface

import numpy as np
from numpy.typing import NDArray

Frames = NDArray[np.float32]
FloatArray = NDArray[np.floating]


class Reference(Interface):
    """How reference counts become the light that signal counts are divided by."""

    def divide(self, signal: Frames, reference: Frames, windows: int) -> None:
        """Divide `signal` (frames of whole windows, channels) in place by the light's course.

        Both come with their offset taken off.
        """
        ...

    def left(self, level: FloatArray) -> Frames:
        """What remains to divide by, from the mean reference of the whole row, (channels,)."""
        ...


@dataclass(frozen=True)
class EveryFrame:
    """Each frame and channel by its own reference: laser noise goes, photon noise doubles."""

    def divide(self, signal: Frames, reference: Frames, windows: int) -> None:
        """Signal over its own reference."""
        signal /= _positive(reference)

    def left(self, level: FloatArray) -> Frames:
        """Nothing."""
        return np.ones(level.shape, np.float32)


@dataclass(frozen=True)
class WindowMean:
    """Each channel by its mean reference over a window: slow drift goes, little noise is added."""

    def divide(self, signal: Frames, reference: Frames, windows: int) -> None:
        """Signal over the window's mean reference."""
        frames, channels = signal.shape
        light = reference.reshape(windows, frames // windows, channels).mean(axis=1, keepdims=True)
        shaped = signal.reshape(windows, frames // windows, channels)
        shaped /= _positive(light)

    def left(self, level: FloatArray) -> Frames:
        """Nothing."""
        return np.ones(level.shape, np.float32)


@dataclass(frozen=True)
class LaserTimesChannel:
    """l(f) r(p): the laser's course from all channels, each channel's level from all frames."""

    def divide(self, signal: Frames, reference: Frames, windows: int) -> None:
        """Signal over the laser's course, the mean over the channels."""
        channels = signal.shape[1]
        course = reference @ np.full(channels, 1 / channels, np.float32)
        signal *= (1 / _positive(course))[:, None]

    def left(self, level: FloatArray) -> Frames:
        """Each channel's level relative to the mean."""
        return _positive(np.asarray(level / max(float(level.mean()), 1e-30), np.float32))


def _positive(light: Frames) -> Frames:
    """The light, or a great number where there is none, so that a dead channel gives zeros.

    A channel that dark is recognised as dead by its counts.
    """
    return np.where(light > 1e-4, light, np.float32(1e30)).astype(np.float32)
