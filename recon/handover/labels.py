"""Which voxels are worth reading, and why not."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.result import SpeciesMaps

DETECTION = 3.3
"""Detection limit in standard errors (ICH Q2(R1), Validation of Analytical Procedures)."""
QUANTIFICATION = 10.0
"""Limit of quantification in standard errors, from the same source."""


class Readability(IntEnum):
    """Label of a voxel in a label mask."""

    UNKNOWN_ERROR = 0
    QUANTIFIABLE = 1
    DETECTED = 2
    BELOW_DETECTION = 3
    NOT_FINITE = 4


MEANING = {
    Readability.UNKNOWN_ERROR: "no standard error was computed",
    Readability.QUANTIFIABLE: "amount above 10 standard errors",
    Readability.DETECTED: "amount above 3.3 but not 10 standard errors: present, read with care",
    Readability.BELOW_DETECTION: "amount within 3.3 standard errors of zero: not readable",
    Readability.NOT_FINITE: "no value",
}


@dataclass(frozen=True, eq=False)
class Labels:
    """A verdict on every voxel of every map, and what each number means.

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

    @classmethod
    def derived(cls, maps: SpeciesMaps) -> Labels:
        """By the limits of detection and quantification."""
        return cls(readability(maps), {int(label): text for label, text in MEANING.items()})


def readability(maps: SpeciesMaps) -> NDArray[np.uint8]:
    """Labels (species, nz, ny, nx) by the ratio of amount to standard error."""
    values, error = maps.values, maps.standard_error
    labels = np.full(values.shape, Readability.UNKNOWN_ERROR, np.uint8)
    if error is not None:
        labels[:] = Readability.BELOW_DETECTION
        labels[values > DETECTION * error] = Readability.DETECTED
        labels[values > QUANTIFICATION * error] = Readability.QUANTIFIABLE
        labels[~np.isfinite(error)] = Readability.UNKNOWN_ERROR
    labels[~np.isfinite(values)] = Readability.NOT_FINITE
    return labels
