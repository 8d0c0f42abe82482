"""The forward matrix with diffusion, written out as direct sums.

Along z molecules step by a normal law between two mirrors (image sources, fine quadrature), along y
and x every Fourier component is integrated over the walk by quadrature over normal steps. Nothing
is shared with `recon.forward` or `recon.physics.diffusion`. Detector and layer are those of
`tests.dense`.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.polynomial.legendre import leggauss
from scipy import constants

from tests.dense import edge_average, overlap

POINTS = 24


@lru_cache
def nodes(points):
    return leggauss(points)


def quadrature(low, high, points=POINTS):
    places, weights = nodes(points)
    return low + (high - low) * (places + 1) / 2, weights * (high - low) / 2


def mirrored_law(z, source, sigma, thickness):
    """Density at z (n,) of molecules that started at `source` (m,), (n, m)."""
    total = np.zeros((len(z), len(source)))
    reach = int(np.ceil(7 * sigma / thickness)) + 1
    for image in range(-reach, reach + 1):
        for sign in (1, -1):
            offset = z[:, None] - (2 * image * thickness + sign * source)
            total += np.exp(-0.5 * (offset / sigma) ** 2) / (np.sqrt(2 * np.pi) * sigma)
    return total


@lru_cache(None)
def seen_layer(kappa, layer, grid, axial, diffusion, time, standing):
    """∫∫ e^{−κz} p(z, z') e^{i k_z z'} over one layer, heights from the diamond face."""
    nz, edge, base = grid.shape[0], grid.voxel[0], grid.base_height
    thickness = nz * edge
    low, high = layer * edge, (layer + 1) * edge
    if diffusion * time == 0:
        z, w = quadrature(low, high)
        return np.sum(w * np.exp(-kappa * (base + z) + 1j * axial * (base + z)))
    layers = [quadrature(n * edge, (n + 1) * edge, 40) for n in range(nz)]
    slab, slab_weight = (np.concatenate(part) for part in zip(*layers, strict=True))
    inside, weight = quadrature(low, high, 40)
    here, w_here, there, w_there = inside, weight, slab, slab_weight
    if not standing:
        here, w_here, there, w_there = slab, slab_weight, inside, weight
    law = mirrored_law(here, there, np.sqrt(2 * diffusion * time), thickness)
    seen = w_here * np.exp(-kappa * (base + here))
    wound = w_there * np.exp(1j * axial * (base + there))
    return seen @ law @ wound


def walk_average(wave, sigma):
    """Mean of e^{i wave u} over a normal step u, for many wavenumbers at once."""
    u, w = quadrature(-8, 8, 80)
    law = w * np.exp(-0.5 * u**2) / np.sqrt(2 * np.pi)
    return np.cos(np.multiply.outer(np.asarray(wave) * sigma, u)) @ law


@lru_cache(None)
def pulse_average(total, wound, diffusion, pulse, steps=400):
    """What is left of one component after a pulse, in many short steps of walking and winding."""
    now = total - wound * (1 - (np.arange(steps) + 0.5) / steps)
    return float(np.prod(walk_average(now, np.sqrt(2 * diffusion * pulse / steps))))


def dense_matrix(grid, instrument, protocol, bases, group, wound_times, diffusion, standing):
    """(shots·times·channels, components·voxels) complex128."""
    (nz, ny, nx), (_, dy, dx) = grid.shape, grid.voxel
    b = instrument.bias_direction
    e1 = np.cross([0, 0, 1.0], b)
    e1 = e1 / np.linalg.norm(e1) if np.linalg.norm(e1) > 1e-9 else np.array([1.0, 0, 0])
    m = e1 - 1j * np.cross(b, e1)
    depths, depth_weights = quadrature(instrument.depth, instrument.depth + instrument.thickness)
    one = instrument.one_detector is not None
    pulse = protocol.encoding_duration
    _, times, components = bases.shape
    channels = instrument.detector.channels()
    rows = np.zeros((len(protocol), times, *channels, components, nz, ny, nx), complex)
    for j in range(len(protocol)):
        n = instrument.sensing_direction(int(protocol.sensing_axis[j]))
        kx, ky, kz = protocol.nuclear_wavevector[j]
        for a in range(-(ny // 2), ny - ny // 2):
            for c in range(-(nx // 2), nx - nx // 2):
                fy, fx = 2 * np.pi * a / (ny * dy), 2 * np.pi * c / (nx * dx)
                kappa = np.hypot(fy, fx)
                pattern = seen_pattern(grid, instrument, channels, one, fy, fx, protocol, j)
                if kappa == 0 or not np.any(pattern):
                    continue
                v = np.array([1j * fx, 1j * fy, kappa])
                strength = constants.mu_0 / 2 * (n @ v) * (m @ v) / kappa
                strength *= np.sum(depth_weights * np.exp(-kappa * depths)) / instrument.thickness
                source_y = np.exp(1j * (ky - fy) * np.arange(ny) * dy) * edge_average(ky - fy, dy)
                source_x = np.exp(1j * (kx - fx) * np.arange(nx) * dx) * edge_average(kx - fx, dx)
                source = strength * source_y[:, None] * source_x / (ny * nx)
                for s, t in np.ndindex(components, times):
                    wait, d = wound_times[group[j], t], diffusion[s]
                    wave = (ky, kx) if standing else (fy, fx)
                    left = np.prod(walk_average(wave, np.sqrt(2 * d * wait)))
                    for u, k in zip(wave, (ky, kx), strict=True):
                        left *= pulse_average(u, k, d, pulse) if pulse else 1.0
                    left *= pulse_average(kz, kz, d, pulse) if pulse else 1.0
                    for iz in range(nz):
                        layer = seen_layer(kappa, iz, grid, kz, d, wait, standing)
                        amount = bases[group[j], t, s] * left * layer * protocol.amplitude[j]
                        rows[j, t, :, :, s, iz] += amount * pattern[..., None, None] * source
    return rows.reshape(-1, components * nz * ny * nx)


def seen_pattern(grid, instrument, channels, one, fy, fx, protocol, j):
    """What the channels see of one component of the field, (channels y, channels x)."""
    qx, qy = protocol.sensor_wavevector[j]
    wy, wx = fy + qy, fx + qx
    if one:
        return np.full(channels, float(max(abs(wy), abs(wx)) < 1e-3 * min(grid.lattice_step)))
    optics, (pixel_y, pixel_x) = instrument.optics, instrument.pixel
    seen = overlap(np.hypot(wy, wx), optics.numerical_aperture, optics.wavelength_nm * 1e-9)
    py = (np.arange(channels[0]) + 0.5) * pixel_y - grid.voxel[1] / 2
    px = (np.arange(channels[1]) + 0.5) * pixel_x - grid.voxel[2] / 2
    pattern_y = np.exp(1j * wy * py) * edge_average(wy, pixel_y)
    return seen * pattern_y[:, None] * (np.exp(1j * wx * px) * edge_average(wx, pixel_x))
