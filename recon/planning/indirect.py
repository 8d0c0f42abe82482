"""An indirect spectral axis: which shot evolves how long, a (k, q, t1) table with parts left out.

Source of the exponential weighting: Barna, Laue, Mayger, Skilling & Worrall, J. Magn. Reson. 73:69
(1987).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.protocol import Protocol

FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Evolutions:
    """Evolution times and how shots share them.

    Attributes
    ----------
    times
        t1, seconds, ascending.
    per_wavevector
        How many different t1 each (k, q) is measured at; all of them make a full table.
    decay
        Time constant of an exponential weight on t1, seconds, so that late ones, where little is
        left, are visited less often; None for an even share.
    seed
        Of the draw.
    """

    times: tuple[float, ...]
    per_wavevector: int = 1
    decay: float | None = None
    seed: int = 0

    def __post_init__(self) -> None:
        times = np.asarray(self.times, float)
        if not times.size or not np.isfinite(times).all() or times[0] < 0:
            raise InputError("must be finite and not negative", "evolution times")
        if (np.diff(times) <= 0).any():
            raise InputError("must ascend", "evolution times", "give each once")
        if not 1 <= self.per_wavevector <= times.size:
            raise InputError(
                f"{self.per_wavevector} of {times.size} evolution times per wavevector",
                "evolution times",
                f"use 1 to {times.size}",
            )
        if self.decay is not None and not self.decay > 0:
            raise InputError("decay must be positive", "evolution times")

    def spread_over(self, protocol: Protocol) -> Protocol:
        """Every shot of a table repeated `per_wavevector` times, each at a t1 of its own.

        Each t1 is drawn as often as its weight says to within one shot, in random order.
        """
        shots, repeats = len(protocol), self.per_wavevector
        chosen = self._drawn(shots)
        table = protocol.subset(np.repeat(np.arange(shots), repeats))
        step = float(np.diff(protocol.clock_time).min()) if shots > 1 else 1.0
        clock = protocol.clock_time[0] + np.arange(len(table)) * step
        times = np.asarray(self.times, float)[chosen.ravel()]
        return replace(table, evolution_time=times, clock_time=clock)

    def _drawn(self, shots: int) -> NDArray[np.intp]:
        """Numbers of the t1 of every shot, ascending, (shots, per_wavevector)."""
        random = np.random.default_rng([self.seed, shots])
        times, repeats = np.asarray(self.times, float), self.per_wavevector
        weight = np.ones(times.size) if self.decay is None else np.exp(-times / self.decay)
        wanted = shots * repeats * weight / weight.sum()
        due = np.zeros(times.size)
        chosen = np.empty((shots, repeats), np.intp)
        for shot in range(shots):
            due += wanted / shots
            order = np.argsort(-(due + 1e-6 * random.random(times.size)))
            chosen[shot] = np.sort(order[:repeats])
            due[chosen[shot]] -= 1
        return chosen[random.permutation(shots)]


def undersampling(protocol: Protocol, lateral_points: int) -> float:
    """Points of the full (k, t1) raster over the shots taken."""
    return lateral_points * len(protocol.evolutions[0]) / len(protocol)
