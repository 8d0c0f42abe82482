"""What each channel turned out to be: its response, its noise, and whether it can be used."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import median_filter

from recon.errors import InputError

FloatArray = NDArray[np.floating]
ComplexArray = NDArray[np.complexfloating]

DARK = 0.05
"""Share of the median light below which a channel is dark."""

HOT = 0.5
"""Share of the usual contrast below which a lit channel is left out as hot."""

WARM_LIGHT, WARM_CONTRAST = 1.15, 0.85
"""Light above and contrast below that of a channel's neighbours, of one with a dark current."""

FAINT = 0.05
"""Share of the median information below which a channel is of no use."""


class State(IntEnum):
    """What a channel is."""

    GOOD = 0
    DARK = 1
    SATURATED = 2
    STUCK = 3
    HOT = 4
    INSENSITIVE = 5


@dataclass(frozen=True, eq=False)
class ChannelState:
    """Maps over the channels, all (channels y, channels x).

    Attributes
    ----------
    response
        Normalised frames per tesla, complex: its phase is the channel's own.
    response_error
        Its standard error (of the modulus, as of the modulus times the phase); NaN if it was not
        measured but follows from contrast and description.
    noise
        Standard deviation of a complex sample at one average, tesla, √E|n|².
    contrast
        C.
    light
        Mean count of the reference above its offset.
    state
        `State` of each channel.
    """

    response: ComplexArray
    response_error: FloatArray
    noise: FloatArray
    contrast: FloatArray
    light: FloatArray
    state: NDArray[np.int8]

    @property
    def good(self) -> NDArray[np.bool_]:
        """Channels that are used."""
        return np.asarray(self.state == State.GOOD)

    @property
    def warm(self) -> NDArray[np.bool_]:
        """Good channels with a dark current: more light and less contrast than their neighbours.

        They are used, with the response and noise that were measured.
        """
        if self.light.size < 9:
            return np.zeros(self.light.shape, bool)
        around = (median_filter(one, 5, mode="nearest") for one in (self.light, self.contrast))
        light, contrast = around
        brighter = self.light > WARM_LIGHT * light
        return np.asarray(self.good & brighter & (self.contrast < WARM_CONTRAST * contrast))

    @property
    def noise_sd(self) -> float:
        """Noise of a channel of average information, 1/√⟨1/σ²⟩ over good channels, tesla."""
        return float(1 / np.sqrt(np.mean(1 / self.noise[self.good] ** 2)))

    @property
    def weight(self) -> NDArray[np.float32]:
        """Inverse variance relative to `noise_sd`, 0 where a channel is not used."""
        weight = np.zeros(self.noise.shape, np.float32)
        weight[self.good] = (self.noise_sd / self.noise[self.good]) ** 2
        return weight

    def count(self, state: State) -> int:
        """Number of channels in a state."""
        return int((self.state == state).sum())

    def __str__(self) -> str:
        bad = [f"{self.count(s)} {s.name.lower()}" for s in State if s and self.count(s)]
        warm = int(self.warm.sum())
        good = f"{self.count(State.GOOD)} good channels"
        if warm:
            good += f" ({warm} of them hot, with a dark current, but usable)"
        return good + (f", {', '.join(bad)}" if bad else "")


def judge(
    response: ComplexArray,
    light: FloatArray,
    contrast: FloatArray,
    frame_noise: FloatArray,
    saturated: NDArray[np.bool_],
) -> NDArray[np.int8]:
    """`State` of every channel, any shape.

    Raises
    ------
    InputError
        No channel is good.
    """
    state = np.full(light.shape, State.GOOD, np.int8)
    typical = np.median(light)
    size = np.abs(response)
    lit = light > DARK * typical
    information = np.divide(
        size**2, frame_noise**2, out=np.zeros(size.shape), where=frame_noise > 0
    )
    state[information < FAINT * np.median(information[lit]) if lit.any() else ~lit] = (
        State.INSENSITIVE
    )
    usual = np.median(contrast[lit]) if lit.any() else 0.0
    state[lit & (contrast < HOT * usual)] = State.HOT
    state[frame_noise <= 0] = State.STUCK
    state[saturated] = State.SATURATED
    state[~lit] = State.DARK
    if not (state == State.GOOD).any():
        raise InputError("no channel can be used", "counts", "check light, contrast and tone")
    return state
