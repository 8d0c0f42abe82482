"""How true field becomes measured samples: counted photons, or none."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol as Interface

import numpy as np
from numpy.typing import NDArray

from recon.instrument import Readout
from recon.physics import photons

Samples = NDArray[np.complex64]


class PhotonNoise(Interface):
    """How true field becomes measured samples."""

    def samples(
        self, field: Samples, readout: Readout, averages: int, generator: np.random.Generator
    ) -> Samples:
        """Measured complex samples of one shot, tesla, in the shape of `field`."""
        ...


@dataclass(frozen=True)
class PoissonNoise:
    """Counted photons: each quadrature takes readouts_per_sample · averages readouts.

    Above `normal_above` mean counts per quadrature the normal distribution of equal mean and
    variance stands for the Poisson distribution; their skewness differs by 1/√counts.
    """

    normal_above: float = 1e7

    def samples(
        self, field: Samples, readout: Readout, averages: int, generator: np.random.Generator
    ) -> Samples:
        """Measured complex samples of one shot, tesla, in the shape of `field`."""
        total = readout.photons_per_readout * readout.readouts_per_sample * averages
        settings = (total, readout.contrast, readout.sensing_time, readout.efficiency)
        measured = np.empty_like(field)
        measured.real = photons.counted_field(field.real, *settings, generator, self.normal_above)
        measured.imag = photons.counted_field(field.imag, *settings, generator, self.normal_above)
        return measured


@dataclass(frozen=True)
class NoNoise:
    """The true field, without photon noise and without the sensor's sine."""

    def samples(
        self, field: Samples, readout: Readout, averages: int, generator: np.random.Generator
    ) -> Samples:
        """The field itself."""
        return field
