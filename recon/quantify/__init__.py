"""From spectra to amounts: fits of every voxel's spectrum, with errors, limits and reasons."""

from recon.quantify.agreement import Agreement, compare
from recon.quantify.assumptions import Refusal, refused
from recon.quantify.field_shift import FieldShift, ShiftEstimate
from recon.quantify.fit import Fit
from recon.quantify.fitted import Fitted
from recon.quantify.limits import Limits, labels, limits
from recon.quantify.nuisance import Nuisance
from recon.quantify.patterns import Baseline, Pattern, patterns_of
from recon.quantify.scale import CalibratedResponse, ReferenceSpecies
from recon.quantify.water import LineRemoval, Removed

__all__ = [
    "Agreement",
    "Baseline",
    "CalibratedResponse",
    "FieldShift",
    "Fit",
    "Fitted",
    "Limits",
    "LineRemoval",
    "Nuisance",
    "Pattern",
    "ReferenceSpecies",
    "Refusal",
    "Removed",
    "ShiftEstimate",
    "compare",
    "labels",
    "limits",
    "patterns_of",
    "refused",
]
