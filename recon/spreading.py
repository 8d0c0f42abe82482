"""What becomes of a wound pattern while molecules diffuse: two views of the same walk.

`FreeDiffusion`: molecules carry amount and phase away; every lateral wavenumber u of the whole
pattern, map included, decays as exp(−D u² t). For molecules that leave where they were.
`StandingMap`: molecules change places within a map that stays as it is over the measurement; only
the phase that the gradient wound, k, decays: exp(−D k² t). For amounts that tissue holds in place,
and maps that vary slowly over 2π/k. A shot without nuclear gradient then loses nothing.

Along z both follow the propagator of a slab whose faces let nothing through.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol as Interface

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputWarning
from recon.physics.diffusion import lateral_decay, pulse_attenuation, pulse_attenuation_of_total
from recon.protocol import Protocol
from recon.specimen import Species

FloatArray = NDArray[np.floating]
Sides = tuple[FloatArray, FloatArray]

NOTICED = 0.1
"""Loss of a wound pattern, as a share of its signal's energy, that is worth a warning."""


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


def wound_loss(protocol: Protocol, one: Species) -> float:
    """Share of a species' signal energy that diffusion takes from the shot it hurts most.

    1 − Σ_t |φ|² exp(−2 D k² t) / Σ_t |φ|², k along all axes, with |φ| = exp(−t/T2*) and the loss
    during the encoding pulse.
    """
    worst = 0.0
    for evolution, group in zip(*_longest_waves(protocol), strict=True):
        plain = np.exp(-2 * protocol.sample_times / one.t2_star)
        left = lateral_decay(group, one.diffusion, protocol.wound_times(evolution)) ** 2
        left = left * pulse_attenuation(group, one.diffusion, protocol.encoding_duration) ** 2
        worst = max(worst, 1 - float(plain @ left / plain.sum()))
    return worst


def _longest_waves(protocol: Protocol) -> tuple[list[float], list[float]]:
    """Largest |k| among the shots of every evolution time."""
    evolutions, group = protocol.evolutions
    length = np.linalg.norm(protocol.nuclear_wavevector, axis=1)
    longest = [float(length[group == number].max()) for number in range(len(evolutions))]
    return evolutions.tolist(), longest


def warn_if_lost(protocol: Protocol, species: Sequence[Species], mend: str) -> None:
    """Say which species' wound patterns diffuse away while they are encoded and listened to."""
    losses = {one.name: wound_loss(protocol, one) for one in species}
    lost = {name: loss for name, loss in losses.items() if loss > NOTICED}
    if lost:
        names = ", ".join(f"{name} ({loss:.0%})" for name, loss in lost.items())
        warnings.warn(
            f"the finest pattern diffuses away while it is listened to: energy lost by {names}, "
            f"which the model leaves out; {mend}",
            InputWarning,
            stacklevel=5,
        )
