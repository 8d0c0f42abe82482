"""What may be assumed about the object: one file per kind, each with its value and its prox."""

from recon.priors.base import Frame, Prior, Term
from recon.priors.bounds import Box, NonNegative
from recon.priors.total_variation import TotalVariation
from recon.priors.wavelet import WaveletSparsity

__all__ = [
    "Box",
    "Frame",
    "NonNegative",
    "Prior",
    "Term",
    "TotalVariation",
    "WaveletSparsity",
]
