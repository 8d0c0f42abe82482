"""The forward matrix, written out as direct sums that share no code with `recon.forward`.

A unit of magnetisation in one voxel, phase-wound by k inside the voxel, makes a field whose
lateral spectrum is (μ0/2)(n·v)(m·v)/κ exp(−κ(z + δ)), integrated over layer and voxel by fine
numerical quadrature, and repeated with the period of the view. The band of field frequencies is
the grid's own. Every channel is the average over its pixel, blurred by the pupil's overlap.
"""

from __future__ import annotations

import numpy as np
from numpy.polynomial.legendre import leggauss
from scipy import constants


def quadrature(low, high, points=24):
    nodes, weights = leggauss(points)
    return low + (high - low) * (nodes + 1) / 2, weights * (high - low) / 2


def overlap(wavenumber, aperture, wavelength):
    """Diffraction-limited transfer by the area common to two shifted pupils of unit radius."""
    shift = wavenumber * wavelength / (2 * np.pi * aperture)
    if shift >= 2:
        return 0.0
    angle, w = quadrature(np.arcsin(shift / 2), np.pi / 2, 60)
    return float(4 * np.sum(w * np.cos(angle) ** 2) / np.pi)


def edge_average(wavenumber, edge):
    t, w = quadrature(-edge / 2, edge / 2)
    return np.sum(w * np.exp(1j * wavenumber * t)) / edge


def dense_matrix(case):
    """(shots·times·channels, components·voxels) complex128, for one small experiment."""
    grid, instrument, protocol, basis = case.grid, case.instrument, case.protocol, case.basis
    (nz, ny, nx), (dz, dy, dx) = grid.shape, grid.voxel
    b = instrument.bias_direction
    e1 = np.cross([0, 0, 1.0], b)
    e1 = e1 / np.linalg.norm(e1) if np.linalg.norm(e1) > 1e-9 else np.array([1.0, 0, 0])
    m = e1 - 1j * np.cross(b, e1)
    depths, depth_weights = quadrature(instrument.depth, instrument.depth + instrument.thickness)
    one = instrument.one_detector is not None
    pixel_y, pixel_x = instrument.pixel
    channels = instrument.detector.channels()
    shots = []
    for j in range(len(protocol)):
        n = instrument.sensing_direction(int(protocol.sensing_axis[j]))
        kx, ky, kz = protocol.nuclear_wavevector[j]
        qx, qy = protocol.sensor_wavevector[j]
        rows = np.zeros((*channels, nz, ny, nx), complex)
        for a in range(-(ny // 2), ny - ny // 2):
            for c in range(-(nx // 2), nx - nx // 2):
                fy, fx = 2 * np.pi * a / (ny * dy), 2 * np.pi * c / (nx * dx)
                kappa = np.hypot(fy, fx)
                if kappa == 0:
                    continue
                v = np.array([1j * fx, 1j * fy, kappa])
                strength = constants.mu_0 / 2 * (n @ v) * (m @ v) / kappa
                layer = np.sum(depth_weights * np.exp(-kappa * depths)) / instrument.thickness
                column = []
                for iz in range(nz):
                    z, w = quadrature(grid.base_height + iz * dz, grid.base_height + (iz + 1) * dz)
                    column.append(np.sum(w * np.exp(-kappa * z + 1j * kz * z)))
                # e^{i(k−κ)·r} averaged over the voxel about its centre
                source_y = np.exp(1j * (ky - fy) * np.arange(ny) * dy) * edge_average(ky - fy, dy)
                source_x = np.exp(1j * (kx - fx) * np.arange(nx) * dx) * edge_average(kx - fx, dx)
                source = strength * layer * np.array(column)[:, None, None]
                source = source * source_y[:, None] * source_x / (ny * nx)
                if one:
                    # mean over the view of e^{i(κ_f + q)·ρ}: one or nothing on the lattice
                    hit = np.isclose(fy + qy, 0, atol=1e-3) and np.isclose(fx + qx, 0, atol=1e-3)
                    rows[0, 0] += source * hit
                    continue
                wy, wx = fy + qy, fx + qx
                optics = instrument.optics
                seen = overlap(
                    np.hypot(wy, wx), optics.numerical_aperture, optics.wavelength_nm * 1e-9
                )
                # pixel centres: the first pixel starts at the first voxel's edge
                py = (np.arange(channels[0]) + 0.5) * pixel_y - dy / 2
                px = (np.arange(channels[1]) + 0.5) * pixel_x - dx / 2
                pattern_y = np.exp(1j * wy * py) * edge_average(wy, pixel_y)
                pattern_x = np.exp(1j * wx * px) * edge_average(wx, pixel_x)
                pattern = seen * pattern_y[:, None] * pattern_x
                rows += pattern[..., None, None, None] * source
        flat = rows.reshape(-1, nz * ny * nx) * protocol.amplitude[j]
        shots.append(
            np.einsum("tr,cv->tcrv", basis, flat).reshape(-1, basis.shape[1] * flat.shape[1])
        )
    return np.concatenate(shots)
