"""From spectra to amounts: fits of every voxel's spectrum, with errors, limits and reasons."""

from recon.quantify.fit import Fit
from recon.quantify.fitted import Fitted
from recon.quantify.nuisance import Nuisance
from recon.quantify.patterns import Baseline, Pattern, patterns_of
from recon.quantify.scale import CalibratedResponse, ReferenceSpecies

__all__ = [
    "Baseline",
    "CalibratedResponse",
    "Fit",
    "Fitted",
    "Nuisance",
    "Pattern",
    "ReferenceSpecies",
    "patterns_of",
]
