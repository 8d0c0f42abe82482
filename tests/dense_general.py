"""The matrix of a measurement with every reality in it, by direct sums of its own.

Field frequencies are those of the object's grid; light is density times field, sampled at voxel
centres and continued by its trigonometric polynomial; a channel averages the light, wound by
exp(i q·ρ) about the view's first voxel, over its pixel.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.polynomial.legendre import leggauss
from scipy import constants

nodes_and_weights = lru_cache(leggauss)


def quadrature(low, high, points=36):
    nodes, weights = nodes_and_weights(points)
    return low + (high - low) * (nodes + 1) / 2, weights * (high - low) / 2


@lru_cache(None)
def overlap(wavenumber, aperture, wavelength):
    """Diffraction-limited transfer by the area common to two shifted pupils of unit radius."""
    shift = wavenumber * wavelength / (2 * np.pi * aperture)
    if shift >= 2:
        return 0.0
    angle, w = quadrature(np.arcsin(shift / 2), np.pi / 2, 60)
    return float(4 * np.sum(w * np.cos(angle) ** 2) / np.pi)


@lru_cache(None)
def edge_average(wavenumber, edge):
    t, w = quadrature(-edge / 2, edge / 2)
    return np.sum(w * np.exp(1j * wavenumber * t)) / edge


def frequencies(grid):
    (_, ny, nx), (_, dy, dx) = grid.shape, grid.voxel
    for a in range(-(ny // 2), ny - ny // 2):
        for c in range(-(nx // 2), nx - nx // 2):
            yield 2 * np.pi * a / (ny * dy), 2 * np.pi * c / (nx * dx)


def field_rows(grid, instrument, axis, k, origin):
    """Field spectrum from voxels, (frequencies, voxels), for phases zero at `origin` (y, x)."""
    (nz, ny, nx), (dz, dy, dx) = grid.shape, grid.voxel
    b = instrument.bias_direction
    e1 = np.cross([0, 0, 1.0], b)
    e1 = e1 / np.linalg.norm(e1) if np.linalg.norm(e1) > 1e-9 else np.array([1.0, 0, 0])
    m, n = e1 - 1j * np.cross(b, e1), instrument.sensing_direction(axis)
    depths, weights = quadrature(instrument.depth, instrument.depth + instrument.thickness)
    y, x = np.arange(ny) * dy, np.arange(nx) * dx
    rows = []
    for fy, fx in frequencies(grid):
        kappa = np.hypot(fy, fx)
        if kappa == 0:
            rows.append(np.zeros(nz * ny * nx, complex))
            continue
        v = np.array([1j * fx, 1j * fy, kappa])
        strength = constants.mu_0 / 2 * (n @ v) * (m @ v) / kappa
        strength *= np.sum(weights * np.exp(-kappa * depths)) / instrument.thickness
        column = []
        for iz in range(nz):
            z, w = quadrature(grid.base_height + iz * dz, grid.base_height + (iz + 1) * dz)
            column.append(np.sum(w * np.exp(-kappa * z + 1j * k[2] * z)))
        along_y = np.exp(1j * k[1] * (y - origin[0]) - 1j * fy * y) * edge_average(k[1] - fy, dy)
        along_x = np.exp(1j * k[0] * (x - origin[1]) - 1j * fx * x) * edge_average(k[0] - fx, dx)
        row = strength * np.array(column)[:, None, None] * along_y[:, None] * along_x
        rows.append(row.ravel() / (ny * nx))
    return np.array(rows)


def channel_columns(grid, instrument, q, origin):
    """Channels from the light's frequencies, (channels, frequencies)."""
    _, dy, dx = grid.voxel
    edge_y, edge_x = instrument.pixel
    count_y, count_x = instrument.detector.channels()
    place_y = origin[0] + (np.arange(count_y) + 0.5) * edge_y - dy / 2
    place_x = origin[1] + (np.arange(count_x) + 0.5) * edge_x - dx / 2
    columns = []
    for fy, fx in frequencies(grid):
        wy, wx = fy + q[1], fx + q[0]
        seen = 1.0
        if instrument.camera is not None:
            optics = instrument.optics
            radius = np.hypot(wy, wx)
            seen = overlap(radius, optics.numerical_aperture, optics.wavelength_nm * 1e-9)
        along_y = np.exp(1j * (wy * place_y - q[1] * origin[0])) * edge_average(wy, edge_y)
        along_x = np.exp(1j * (wx * place_x - q[0] * origin[1])) * edge_average(wx, edge_x)
        columns.append((seen * along_y[:, None] * along_x).ravel())
    return np.array(columns).T


def dense_general(case, margin=(0, 0), density=None, gain=None, courses=None):
    """(shots·times·channels, components·voxels) complex128; the grid may exceed the view."""
    grid, protocol = case.grid, case.protocol
    (_, ny, nx), (_, dy, dx) = grid.shape, grid.voxel
    origin = margin[0] * dy, margin[1] * dx
    places = [(y, x) for y in np.arange(ny) * dy for x in np.arange(nx) * dx]
    to_places = np.array([[np.exp(1j * (f @ p)) for f in map(np.array, frequencies(grid))]
                          for p in map(np.array, places)])  # fmt: skip
    shots = []
    for j in range(len(protocol)):
        axis, k = int(protocol.sensing_axis[j]), protocol.nuclear_wavevector[j]
        spectrum = field_rows(grid, case.instrument, axis, k, origin)
        if density is not None:
            light = density.ravel()[:, None] * (to_places @ spectrum)
            spectrum = to_places.conj().T @ light / (ny * nx)
        seen = channel_columns(grid, case.instrument, protocol.sensor_wavevector[j], origin)
        flat = seen @ spectrum * protocol.amplitude[j]
        flat = flat if gain is None else gain.ravel()[:, None] * flat
        basis = case.basis if courses is None else courses[j]
        part = np.einsum("tr,cv->tcrv", basis, flat)
        shots.append(part.reshape(-1, basis.shape[1] * flat.shape[1]))
    return np.concatenate(shots)
