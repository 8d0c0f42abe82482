"""What a fit may vary besides amounts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from recon.errors import InputError


@dataclass(frozen=True)
class Nuisance:
    """One nuisance parameter.

    Attributes
    ----------
    bound
        Largest magnitude (or largest value, for the decay, which is not negative).
    tie
        How far a voxel may stray from its neighbourhood's mean, one standard deviation; infinite
        for no tie, 0 to hold the parameter at zero.
    reach_voxels
        Size of the neighbourhood, standard deviation of its Gaussian.
    """

    bound: float
    tie: float = np.inf
    reach_voxels: float = 1.5

    def __post_init__(self) -> None:
        if not (0 <= self.bound < np.inf and self.tie >= 0 and self.reach_voxels > 0):
            raise InputError(
                "bound must be finite, and bound and tie must not be negative", "nuisance"
            )

    @property
    def free(self) -> bool:
        """It is fitted at all."""
        return self.bound > 0 and self.tie > 0
