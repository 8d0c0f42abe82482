"""Spatially resolved NMR spectroscopic imaging with diamond quantum sensors.

The names below are in the order in which data flow: describe, encode, simulate or open a record,
calibrate, reconstruct, hand over. Conventions: arrays (component, z, y, x), SI units, z = 0 at the
diamond face. Research use only, not for diagnosis.
"""

from recon.errors import InputError, InputWarning
from recon.grid import Grid
from recon.instrument import Instrument
from recon.specimen import Species, Specimen
from recon.protocol import Protocol, SpectralAxis
from recon.spreading import FreeDiffusion, StandingMap
from recon.band import Band
from recon.separability import Separability
from recon.simulate import SimulationOptions, simulate
from recon.record import Record, RecordWriter
from recon.counts import Acquisition, CountsRecord, CountsWriter, Tone, convert
from recon.calibrate.calibration import Calibration, calibrate
from recon.unknown import ComplexCube, SpeciesAmounts
from recon.priors import (
    Box,
    LocalLowRank,
    LowRank,
    NonNegative,
    Support,
    TotalGeneralisedVariation,
    TotalVariation,
    UndecimatedWaveletSparsity,
    WaveletSparsity,
)
from recon.solvers.penalised import Penalised
from recon.solvers.ridge import Ridge
from recon.reconstruct import reconstruct
from recon.result import Cube, SpeciesMaps, load_result

__all__ = [
    "Acquisition",
    "Band",
    "Box",
    "Calibration",
    "ComplexCube",
    "CountsRecord",
    "CountsWriter",
    "Cube",
    "FreeDiffusion",
    "Grid",
    "InputError",
    "InputWarning",
    "Instrument",
    "LocalLowRank",
    "LowRank",
    "NonNegative",
    "Penalised",
    "Protocol",
    "Record",
    "RecordWriter",
    "Ridge",
    "Separability",
    "SimulationOptions",
    "Species",
    "SpeciesAmounts",
    "SpeciesMaps",
    "Specimen",
    "SpectralAxis",
    "StandingMap",
    "Support",
    "Tone",
    "TotalGeneralisedVariation",
    "TotalVariation",
    "UndecimatedWaveletSparsity",
    "WaveletSparsity",
    "calibrate",
    "convert",
    "load_result",
    "reconstruct",
    "simulate",
]
