"""How much signal each shot of a train has, and how long it takes.

Thermal nuclei repeat in a steady state; hyperpolarised ones are spent shot by shot and by T1, and
are polarised anew when the budget allows. Repeated ancilla readout trades dead time for noise.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Protocol as Interface

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.protocol import Protocol

FloatArray = NDArray[np.floating]


class Train(Interface):
    """Amplitudes and start times of successive shots."""

    def amplitudes(self, shots: int, shot_duration: float) -> tuple[FloatArray, FloatArray]:
        """Signal relative to the full magnetisation, and clock times in seconds, (shots,)."""


@dataclass(frozen=True)
class Thermal:
    """Steady state of equal pulses: sin θ (1 − E)/(1 − E cos θ), E = exp(−T_R/T1).

    Source: Ernst & Anderson, Rev. Sci. Instrum. 37:93 (1966).
    """

    t1_s: float
    flip_angle_deg: float | None = None

    def __post_init__(self) -> None:
        if not self.t1_s > 0:
            raise InputError("t1_s must be positive", "thermal train")

    def amplitudes(self, shots: int, shot_duration: float) -> tuple[FloatArray, FloatArray]:
        """The flip angle is Ernst's, cos θ = E, unless stated."""
        left = np.exp(-shot_duration / self.t1_s)
        angle = np.arccos(left) if self.flip_angle_deg is None else np.radians(self.flip_angle_deg)
        signal = np.sin(angle) * (1 - left) / (1 - left * np.cos(angle))
        return np.full(shots, signal), np.arange(shots) * shot_duration


@dataclass(frozen=True)
class Hyperpolarised:
    """A train of `per_fill` shots, then polarising anew for `fill_time_s`.

    Shot n of a fill has sin θ_n Π_{m<n} cos θ_m · exp(−n T_R/T1). With `flip_angle_deg` None the
    angles grow so that all shots of a fill share the magnetisation equally but for T1:
    tan θ_n = 1/√(N − 1 − n) for shot n of N (Zhao et al., J. Magn. Reson. B 113:179, 1996; from
    memory).
    """

    t1_s: float
    per_fill: int = 16
    fill_time_s: float = 60.0
    flip_angle_deg: float | None = None

    def __post_init__(self) -> None:
        if not (self.t1_s > 0 and self.per_fill >= 1 and self.fill_time_s >= 0):
            raise InputError(
                "t1_s and per_fill must be positive, fill_time_s not negative", "polarised train"
            )

    def amplitudes(self, shots: int, shot_duration: float) -> tuple[FloatArray, FloatArray]:
        place = np.arange(self.per_fill)
        if self.flip_angle_deg is None:
            angles = np.arctan2(1.0, np.sqrt(self.per_fill - 1.0 - place))
        else:
            angles = np.full(self.per_fill, np.radians(self.flip_angle_deg))
        left = np.concatenate([[1.0], np.cumprod(np.cos(angles))[:-1]])
        signal = np.sin(angles) * left * np.exp(-place * shot_duration / self.t1_s)
        number = np.arange(shots)
        fill, inside = np.divmod(number, self.per_fill)
        cycle = self.fill_time_s + self.per_fill * shot_duration
        clock = self.fill_time_s + fill * cycle + inside * shot_duration
        return signal[inside], clock


def in_train(
    protocol: Protocol, train: Train, excitation_s: float, excitations: int = 1
) -> Protocol:
    """The same table with the amplitudes and clock times of a train, in the table's order.

    Averages of a shot, and the excitations of one average, are taken as successive excitations of
    the train; the shot has their r.m.s. amplitude, which gives the same information.
    """
    counts = np.asarray(protocol.averages) * excitations
    signal, clock = train.amplitudes(int(counts.sum()), excitation_s)
    first = np.concatenate([[0], np.cumsum(counts)[:-1]])
    power = np.add.reduceat(signal**2, first) / counts
    amplitude = protocol.amplitude * np.sqrt(power)
    return replace(protocol, amplitude=amplitude, clock_time=clock[first])


@dataclass(frozen=True)
class AncillaReadout:
    """Repeated readout through an ancilla spin.

    The signal-to-noise of one interrogation grows by `gain`, and each takes `dead_time_us`
    longer, so fewer fit in a sample: noise falls by gain · √(t/(t + dead)).
    """

    gain: float = 30.0
    dead_time_us: float = 160.0

    def __post_init__(self) -> None:
        if not (self.gain > 0 and self.dead_time_us >= 0):
            raise InputError("gain must be positive, dead time not negative", "ancilla readout")

    def noise_gain(self, sensing_time: float) -> float:
        """By what factor the noise of a sample falls; `sensing_time` in seconds."""
        return self.gain * float(np.sqrt(sensing_time / (sensing_time + self.dead_time_us * 1e-6)))


@dataclass(frozen=True)
class PlainReadout:
    """One optical readout per interrogation."""

    def noise_gain(self, sensing_time: float) -> float:
        """1."""
        return 1.0
