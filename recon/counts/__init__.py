"""From photon counts to samples in tesla: records of counts, their import, their conversion."""

from recon.counts.acquisition import Acquisition, Tone
from recon.counts.conversion import Conversion, convert
from recon.counts.record import CountsRecord
from recon.counts.writer import CountsWriter

__all__ = [
    "Acquisition",
    "Conversion",
    "CountsRecord",
    "CountsWriter",
    "Tone",
    "convert",
]
