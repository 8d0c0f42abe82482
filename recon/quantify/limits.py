"""What can be detected and quantified, and which voxels are not worth reading, with the reason.

Limit of detection 3.3 s_B and limit of quantification 10 s_B, s_B the standard error of an amount
where there is none of it (the blank). Convention of ICH Q2(R1), and of IUPAC for errors of 5 % of
both kinds, 3.29 s_B (Currie, Pure Appl. Chem. 67:1699, 1995).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.labels import Labels, Readability
from recon.quantify.fitted import Fitted

FloatArray = NDArray[np.floating]

DETECTION = 3.3
QUANTIFICATION = 10.0

CHANCE = 1e-5
"""Probability that noise alone gives a χ² that is called poor."""

BLENDED = 0.95
"""Correlation of two amounts' errors, above which each is 3 times as uncertain for the other."""


@dataclass(frozen=True, eq=False)
class Limits:
    """By species and depth.

    Attributes
    ----------
    names
        Of the species.
    detection, quantification
        mM, (species, nz); infinite in a plane without information.
    """

    names: tuple[str, ...]
    detection: FloatArray
    quantification: FloatArray

    def facts(self) -> dict[str, dict[str, list[float]]]:
        """As plain JSON values."""
        return {
            name: {"detection_mM": low.tolist(), "quantification_mM": high.tolist()}
            for name, low, high in zip(self.names, self.detection, self.quantification, strict=True)
        }


def limits(fitted: Fitted) -> Limits:
    """Limits of a voxel at every depth: from the r.m.s. error of the blank over the plane."""
    known = np.isfinite(fitted.blank_error)
    total = np.where(known, fitted.blank_error.astype(float) ** 2, 0).sum(axis=(2, 3))
    count = known.sum(axis=(2, 3))
    blank = np.where(count > 0, np.sqrt(total / np.maximum(count, 1)), np.inf)
    return Limits(fitted.names, DETECTION * blank, QUANTIFICATION * blank)


def labels(fitted: Fitted) -> Labels:
    """A label for every voxel and species; what comes first below wins.

    No information; the noise does not explain the residual; a nuisance at its bound although
    something is detected; blended: the amount, or that of the species it is correlated with, would
    be detected were the other known, but is not quantifiable; below detection; detected;
    quantifiable.
    """
    amounts, blank = fitted.amounts, fitted.blank_error
    found = np.full(amounts.shape, Readability.BELOW_DETECTION, np.uint8)
    detected = amounts >= DETECTION * blank
    found[detected] = Readability.DETECTED
    found[amounts >= QUANTIFICATION * blank] = Readability.QUANTIFIABLE
    alone = blank * np.sqrt(np.maximum(1 - fitted.correlation.astype(float) ** 2, 1e-6))
    there = amounts >= DETECTION * alone
    partner = fitted.partner.astype(int)
    either = there | np.take_along_axis(there, partner, 0)
    blended = (fitted.correlation >= BLENDED) & either & (amounts < QUANTIFICATION * blank)
    found[blended] = (Readability.BLENDED + partner[blended]).astype(np.uint8)
    at_bound = nuisance_at_bound(fitted) & detected.any(axis=0)
    found[:, at_bound] = Readability.NUISANCE_AT_BOUND
    found[:, fitted.poor(CHANCE)] = Readability.POOR_FIT
    found[~np.isfinite(fitted.standard_error)] = Readability.NO_INFORMATION
    return Labels(found, meaning(fitted))


def nuisance_at_bound(fitted: Fitted) -> NDArray[np.bool_]:
    """Voxels in which shift, decay or phase was stopped by its bound, (nz, ny, nx)."""
    stopped = np.zeros(fitted.chi_squared.shape, bool)
    nuisances = (fitted.shift_Hz, fitted.decay_per_s, fitted.phase_rad)
    for value, bound in zip(nuisances, fitted.bounds, strict=True):
        if bound > 0:
            stopped |= np.abs(value) >= 0.999 * bound
    return stopped


def meaning(fitted: Fitted) -> dict[int, str]:
    """What each label says."""
    told = {
        Readability.QUANTIFIABLE: "amount above 10 standard errors of the blank",
        Readability.DETECTED: "amount above 3.3 but not 10 standard errors of the blank: present, "
        "read with care",
        Readability.BELOW_DETECTION: "amount below 3.3 standard errors of the blank",
        Readability.POOR_FIT: "the noise does not explain the residual of the fit",
        Readability.NUISANCE_AT_BOUND: "line shift, width or phase at the bound it was given",
        Readability.NO_INFORMATION: "no information: the noise is unknown or infinite",
    }
    numbers = {int(key): text for key, text in told.items()}
    for place, name in enumerate(fitted.names):
        numbers[Readability.BLENDED + place] = f"blended with {name}: their sum is better known"
    return numbers
