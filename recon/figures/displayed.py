"""Spectra as they are drawn: apodised and finely sampled, for the eye only; no fit uses them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Display:
    """How time courses are turned into spectra for drawing.

    Attributes
    ----------
    apodisation_Hz
        Full width at half maximum that exp(−π width t) adds to every line.
    fineness
        Points per resolution 1/duration.
    """

    apodisation_Hz: float = 0.0  # noqa: N815
    fineness: int = 8

    def __post_init__(self) -> None:
        if not self.apodisation_Hz >= 0 or self.fineness < 1:
            raise InputError("apodisation_Hz must not be negative, fineness at least 1", "display")

    def axis(
        self, times: FloatArray, larmor_frequency: float, reference_shift_ppm: float
    ) -> FloatArray:
        """Ascending ppm over the band that the times span, (F,)."""
        steps = np.diff(times)
        if not steps.size:
            raise InputError("one sample time makes no spectrum", "display")
        half = 0.5 / float(steps.min())
        count = int(np.ceil(2 * half * float(times[-1] - times[0] + steps.min())))
        frequency = np.linspace(-half, half, self.fineness * count, endpoint=False)
        return np.asarray(reference_shift_ppm + frequency / (larmor_frequency * 1e-6))

    def matrix(
        self,
        times: FloatArray,
        shift_ppm: FloatArray,
        larmor_frequency: float,
        reference_shift_ppm: float,
    ) -> ComplexArray:
        """D (F, T) with spectrum D M: Δt w(t) exp(+i 2π (δ − δ_ref)·1e-6·f t), first sample halved.

        w(t) = exp(−π width t). Errors follow the same way: the covariance is D C Dᴴ.
        """
        frequency = (shift_ppm - reference_shift_ppm) * 1e-6 * larmor_frequency
        weight = np.gradient(np.asarray(times, float)) * np.exp(
            -np.pi * self.apodisation_Hz * np.asarray(times)
        )
        weight[0] *= 0.5
        return np.exp(2j * np.pi * frequency[:, None] * times) * weight
