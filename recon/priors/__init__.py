"""What may be assumed about the object: one file per kind, each with its value and its prox."""

from recon.priors.base import Frame, Prior, Term
from recon.priors.bounds import Box, NonNegative
from recon.priors.low_rank import LocalLowRank, LowRank
from recon.priors.support import Support
from recon.priors.total_generalised_variation import TotalGeneralisedVariation
from recon.priors.total_variation import TotalVariation
from recon.priors.undecimated_wavelet import UndecimatedWaveletSparsity
from recon.priors.wavelet import WaveletSparsity

__all__ = [
    "Box",
    "Frame",
    "LocalLowRank",
    "LowRank",
    "NonNegative",
    "Prior",
    "Support",
    "Term",
    "TotalGeneralisedVariation",
    "TotalVariation",
    "UndecimatedWaveletSparsity",
    "WaveletSparsity",
]
