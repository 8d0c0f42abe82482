"""A verdict on every voxel of every map, and what each number means."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError


class Readability(IntEnum):
    """Label of a voxel; from `BLENDED` on, the species it is blended with is added."""

    UNKNOWN_ERROR = 0
    QUANTIFIABLE = 1
    DETECTED = 2
    BELOW_DETECTION = 3
    NOT_FINITE = 4
    POOR_FIT = 5
    NUISANCE_AT_BOUND = 6
    NO_INFORMATION = 7
    BLENDED = 16


@dataclass(frozen=True, eq=False)
class Labels:
    """Labels of a set of maps.

    Attributes
    ----------
    values
        (species, nz, ny, nx), whole numbers 0 to 255.
    meaning
        A sentence for every number that occurs.
    """

    values: NDArray[np.uint8]
    meaning: Mapping[int, str]

    def __post_init__(self) -> None:
        unknown = set(np.unique(self.values).tolist()) - set(self.meaning)
        if unknown:
            raise InputError(f"label {min(unknown)} has no meaning", "labels", "give one sentence")

    @property
    def readable(self) -> NDArray[np.bool_]:
        """Detected or better, (species, nz, ny, nx)."""
        good = (Readability.QUANTIFIABLE, Readability.DETECTED)
        return np.isin(self.values, [int(one) for one in good])
