"""One small volume on the sensor, without imaging: what it takes to see it at all."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from recon.errors import InputError
from recon.instrument import Instrument
from recon.physics.dipole import magnetisation_direction
from recon.physics.magnetisation import polarised_magnetisation, thermal_polarisation

FloatArray = NDArray[np.floating]
POINTS = 12


@dataclass(frozen=True)
class SingleVolume:
    """A cube of edge `edge_um` on the diamond face above a layer of an instrument.

    Attributes
    ----------
    nuclei
        Equivalent nuclei of the molecule.
    polarisation
        None for thermal equilibrium.
    density_T_per_rtHz
        Field noise density of the whole area under the cube.
    """

    instrument: Instrument
    edge_um: float
    nuclei: int = 3
    polarisation: float | None = None
    density_pT_per_rtHz: float = 30.0  # noqa: N815

    def __post_init__(self) -> None:
        if not (self.edge_um > 0 and self.density_pT_per_rtHz > 0):
            raise InputError("edge and noise density must be positive", "single volume")

    def field_per_mM(self) -> float:  # noqa: N802
        """R.m.s. field amplitude under the cube along sensing axis 1, tesla per mM.

        The dipole law summed over the cube and averaged in square over the layer beneath it.
        """
        edge = self.edge_um * 1e-6
        inside = (np.arange(POINTS) + 0.5) / POINTS - 0.5
        z, y, x = np.meshgrid(inside + 0.5, inside, inside, indexing="ij")
        source = np.stack([x, y, z], axis=-1).reshape(-1, 3) * edge
        depth = self.instrument.depth + self.instrument.thickness * (np.arange(4) + 0.5) / 4
        below, wide, long = np.meshgrid(-depth, inside * edge, inside * edge, indexing="ij")
        sensor = np.stack([long, wide, below], axis=-1).reshape(-1, 3)
        # sources at cell centres, sensors between them: no pair nearer than half a cell
        sensor[:, :2] += 0.25 * edge / POINTS
        n = self.instrument.sensing_direction(1)
        m = magnetisation_direction(self.instrument.bias_direction)
        total = np.zeros(len(sensor), complex)
        for place in source:
            offset = sensor - place
            square = (offset**2).sum(-1)
            total += (3 * (offset @ n) * (offset @ m) / square - n @ m) / square**1.5
        field = constants.mu_0 / (4 * np.pi) * total * (edge / POINTS) ** 3
        return float(np.sqrt((np.abs(field) ** 2).mean())) * self._magnetisation()

    def detection_limit(self, seconds: float) -> float:
        """Amount in mM at 3.3 standard errors after listening for a time."""
        noise = self.density_pT_per_rtHz * 1e-12 / np.sqrt(seconds)
        return 3.3 * noise / self.field_per_mM()

    def seconds_to_detect(self, amount_mM: float) -> float:
        """Time until an amount stands at 3.3 standard errors."""
        return float(self.detection_limit(1.0) / amount_mM) ** 2

    def _magnetisation(self) -> float:
        field = float(np.linalg.norm(self.instrument.bias_field))
        thermal = thermal_polarisation(field, self.instrument.temperature)
        share = thermal if self.polarisation is None else self.polarisation
        return polarised_magnetisation(constants.N_A * self.nuclei, share)
