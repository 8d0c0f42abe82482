"""Wide specimen and sheared gradients: the simulator and the general operator agree.

The simulator convolves in real space without wrap and knows no lattice; it measures the whole
section, of which the view's pixels are then kept.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from recon.basis import species_basis
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.off_lattice import calibrated
from recon.grid import Grid
from recon.simulate import NoNoise, SimulationOptions, simulate
from recon.specimen import Specimen
from tests.cases import instrument
from tests.test_agreement import COARSE, FINEST, SPECIES, VOXEL, amounts, table

MARGIN = 3
VIEW = Grid((2, 10, 10), COARSE.voxel)
SHEAR = np.array([[1.03, 0.04, 0], [-0.05, 0.97, 0], [0, 0, 1.1]])


def measured():
    """The section's record cropped to the view, phases zero at the view's first voxel."""
    protocol = calibrated(table(), SHEAR, SHEAR[:2, :2])
    total = protocol.nuclear_wavevector[:, :2] + protocol.sensor_wavevector
    moved = protocol.amplitude * np.exp(-1j * MARGIN * VOXEL * total.sum(axis=1))
    specimen = Specimen(COARSE, SPECIES, amounts(COARSE, (FINEST,) * 3, 0.0), (FINEST,) * 3)
    record = simulate(
        specimen,
        instrument("camera", COARSE, pixel_um=4.0),
        replace(protocol, amplitude=moved),
        options=SimulationOptions(photon_noise=NoNoise(), lateral_refinement=2),
    )
    kept = slice(MARGIN, MARGIN + 10)
    return protocol, record.samples_in_memory()[..., kept, kept]


def predicted(protocol, refinement):
    """The general operator's samples on the section's grid refined by a factor."""
    grid = COARSE.refined((refinement,) * 3)
    origin = (VOXEL - VOXEL / refinement) / 2
    parts = FINEST // refinement
    nz, ny, nx = grid.shape
    fine = amounts(grid, (parts,) * 3, origin)
    means = fine.reshape(1, nz, parts, ny, parts, nx, parts).mean(axis=(2, 4, 6))
    apparatus = instrument("camera", VIEW, pixel_um=4.0)
    basis = species_basis(SPECIES, apparatus, protocol)
    margin = (MARGIN * refinement, MARGIN * refinement)
    model = GeneralModel.build(grid, apparatus, protocol, basis, 1.0, margin=margin)
    samples = GeneralOperator(model, np.complex128).apply(means.astype(complex))
    total = protocol.nuclear_wavevector[:, :2] + protocol.sensor_wavevector
    return samples * np.exp(-1j * origin * total.sum(axis=1))[:, None, None, None]


def test_agreement_improves_with_the_square_of_the_voxel():
    """As for the ideal operator: at least second order, to below 1.5 % at 1 µm voxels."""
    protocol, samples = measured()
    scale = np.linalg.norm(samples)
    errors = [np.linalg.norm(predicted(protocol, f) - samples) / scale for f in (1, 2, 4)]
    assert np.log2(errors[0] / errors[1]) > 1.8, errors
    assert errors[2] < 0.015, errors
