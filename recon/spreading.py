"""What becomes of a wound pattern while molecules diffuse: two views of the same walk.

`FreeDiffusion`: molecules carry amount and phase away; every lateral wavenumber u of the whole
pattern, map included, decays as exp(−D u² t). For molecules that leave where they were.
`StandingMap`: molecules change places within a map that stays as it is over the measurement; only
the phase that the gradient wound, k, decays: exp(−D k² t). For amounts that tissue holds in place,
and maps that vary slowly over 2π/k. A shot without nuclear gradient then loses nothing.

Along z both follow the propagator of a slab whose faces let nothing through.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol as Interface

import numpy as np
from numpy.typing import NDArray

from recon.physics.diffusion import lateral_decay, pulse_attenuation, pulse_attenuation_of_total

FloatArray = NDArray[np.floating]
Sides = tuple[FloatArray, FloatArray]


class Spreading(Interface):
    """What diffusion leaves of each lateral wavevector."""

    @property
    def standing(self) -> bool:
        """The map stays as it is."""

    def lateral(
        self, total: Sides, wound: FloatArray, diffusion: float, times: FloatArray, pulse: float
    ) -> FloatArray:
        """What is left of the total wavevector u, (times, uy, ux) or (times, 1, 1).

        Parameters
        ----------
        total
            u along y, (uy, 1), and x, (ux,), at the end of the encoding, rad/m.
        wound
            k along (y, x), rad/m.
        diffusion
            D, m²/s.
        times
            Since the encoding pulse, seconds.
        pulse
            Length of the pulse, seconds.
        """

    def knows_wound(self, pulse: float) -> bool:
        """Whether the loss depends on k besides u."""


@dataclass(frozen=True)
class FreeDiffusion:
    """Molecules carry amount and phase away."""

    standing: bool = False

    def lateral(
        self, total: Sides, wound: FloatArray, diffusion: float, times: FloatArray, pulse: float
    ) -> FloatArray:
        """exp(−D u² t) times the loss during the pulse."""
        sides = (
            lateral_decay(side, diffusion, times.reshape(-1, *[1] * side.ndim)) for side in total
        )
        left_y, left_x = sides
        left = left_y * left_x[:, None, :]
        if pulse:
            left = left * pulse_attenuation_of_total(total, wound, diffusion, pulse)
        return left

    def knows_wound(self, pulse: float) -> bool:
        """Only through the pulse."""
        return pulse > 0


@dataclass(frozen=True)
class StandingMap:
    """Molecules change places within a map that stays as it is."""

    standing: bool = True

    def lateral(
        self, total: Sides, wound: FloatArray, diffusion: float, times: FloatArray, pulse: float
    ) -> FloatArray:
        """exp(−D k² (t + δ/3))."""
        length = float(np.hypot(*wound))
        left = lateral_decay(length, diffusion, times) * pulse_attenuation(length, diffusion, pulse)
        return np.asarray(left)[:, None, None]

    def knows_wound(self, pulse: float) -> bool:
        """Always."""
        return True
