"""What single channels really do: dead pixels, gain, noise of their own, and distrust.

A channel c of the camera returns g_c times what the ideal channel would, with noise variance
σ²/v_c; v_c = 0 says the channel is dead or ignored. Multiplying by a channel's gain leaves the
object's frequencies uncoupled no longer, so the blocks are not exact for these.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Channels:
    """Gain and relative weight of every channel, both (channels y, channels x).

    Attributes
    ----------
    gain
        Complex factor on the field that the channel reports, unitless.
    weight
        Inverse noise variance relative to the record's stated one; 0 for a dead channel.

    Raises
    ------
    InputError
        Shapes differ, a value is not finite, a weight is negative, or all are zero.
    """

    gain: ComplexArray
    weight: FloatArray

    def __post_init__(self) -> None:
        if self.gain.ndim != 2 or self.gain.shape != self.weight.shape:
            raise InputError(
                f"gain {self.gain.shape} and weight {self.weight.shape} need one shape (y, x)",
                "channels",
            )
        if not (np.isfinite(self.gain).all() and np.isfinite(self.weight).all()):
            raise InputError(
                "gain or weight is not finite", "channels", "give dead channels weight 0"
            )
        if (self.weight < 0).any():
            raise InputError("a weight is negative", "channels")
        if not (self.information > 0).any():
            raise InputError("every channel is dead", "channels", "check mask and gain")

    @classmethod
    def ideal(cls, shape: tuple[int, int]) -> Channels:
        """Gain 1 and weight 1 everywhere."""
        return cls(np.ones(shape, complex), np.ones(shape))

    @property
    def shape(self) -> tuple[int, int]:
        """(channels y, channels x)."""
        rows, columns = self.gain.shape
        return rows, columns

    @property
    def information(self) -> FloatArray:
        """|g|² v: a channel's share in the normal operator, 1 for an ideal channel."""
        return np.asarray(np.abs(self.gain) ** 2 * self.weight)

    @property
    def alive(self) -> int:
        """Number of channels with a weight above zero."""
        return int(np.count_nonzero(self.weight))

    def without(self, dead: NDArray[np.bool_]) -> Channels:
        """The same with some channels dead, a mask (channels y, channels x)."""
        return self.reweighted(~self._checked(np.asarray(dead, bool)))

    def with_gain(self, gain: ComplexArray | FloatArray) -> Channels:
        """The same with the gain multiplied by a map."""
        return Channels(self.gain * self._checked(np.asarray(gain)), self.weight)

    def with_noise(self, noise_sd: FloatArray) -> Channels:
        """The same with standard deviations of the noise relative to the stated one, above 0."""
        relative = self._checked(np.asarray(noise_sd, float))
        if not (relative > 0).all():
            raise InputError("a relative noise is not positive", "channels", "mask dead channels")
        return self.reweighted(1 / relative**2)

    def reweighted(self, factor: NDArray[Any]) -> Channels:
        """The same with the weights multiplied by a map."""
        return Channels(self.gain, self.weight * np.asarray(self._checked(factor), float))

    def _checked(self, values: NDArray[Any]) -> NDArray[Any]:
        if values.shape != self.shape:
            raise InputError(f"a map of shape {values.shape}, not {self.shape}", "channels")
        return values


@dataclass(frozen=True, eq=False)
class LayerDensity:
    """Density of sensor spins over the layer relative to its mean, on the object's lateral grid.

    The light of a place is its density times its field; optics and pixels blur the product. The
    product is sampled on the voxel grid, so density detail finer than a voxel must be averaged
    before.
    """

    density: FloatArray

    def __post_init__(self) -> None:
        if self.density.ndim != 2 or not np.isfinite(self.density).all():
            raise InputError("density needs finite values (y, x)", "sensor layer")
        if (self.density < 0).any() or not self.density.any():
            raise InputError("density must be positive somewhere, negative nowhere", "sensor layer")
