"""Which voxels are worth reading, and why not."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from recon import labels
from recon.labels import Readability as Readability
from recon.result import SpeciesMaps

DETECTION = 3.3
"""Detection limit in standard errors (ICH Q2(R1), Validation of Analytical Procedures)."""
QUANTIFICATION = 10.0
"""Limit of quantification in standard errors, from the same source."""


MEANING = {
    Readability.UNKNOWN_ERROR: "no standard error was computed",
    Readability.QUANTIFIABLE: "amount above 10 standard errors",
    Readability.DETECTED: "amount above 3.3 but not 10 standard errors: present, read with care",
    Readability.BELOW_DETECTION: "amount within 3.3 standard errors of zero: not readable",
    Readability.NOT_FINITE: "no value",
}


class Labels(labels.Labels):
    """Labels that are handed over."""

    @classmethod
    def derived(cls, maps: SpeciesMaps) -> Labels:
        """Those that came with the maps, or by the limits of detection and quantification."""
        if maps.labels is not None:
            return cls(maps.labels.values, maps.labels.meaning)
        return cls(readability(maps), {int(label): text for label, text in MEANING.items()})


def readability(maps: SpeciesMaps) -> NDArray[np.uint8]:
    """Labels (species, nz, ny, nx) by the ratio of amount to standard error."""
    values, error = maps.values, maps.standard_error
    found = np.full(values.shape, Readability.UNKNOWN_ERROR, np.uint8)
    if error is not None:
        found[:] = Readability.BELOW_DETECTION
        found[values > DETECTION * error] = Readability.DETECTED
        found[values > QUANTIFICATION * error] = Readability.QUANTIFIABLE
        found[~np.isfinite(error)] = Readability.UNKNOWN_ERROR
    found[~np.isfinite(values)] = Readability.NOT_FINITE
    return found
