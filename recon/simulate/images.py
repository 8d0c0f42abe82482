"""What the channels see of each species: convolution, sensor gradient, blur, pixels."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.instrument import Camera
from recon.physics.optics import optical_transfer, pixel_footprint
from recon.physics.real_space import VoxelResponse
from recon.simulate.scene import Scene, Wavevectors

Progress = Callable[[int, int], None]
Samples = NDArray[np.complex64]


def species_images(scene: Scene, progress: Progress | None) -> Samples:
    """What each shot's channels see of each species at t = 0, (shots, species, cy, cx), tesla."""
    channels = scene.instrument.detector.channels()
    shots, species = len(scene.protocol), len(scene.magnetisation)
    images = np.empty((shots, species, *channels), np.complex64)
    detect = detector(scene)
    done = 0
    for axis, members, largest in scene.axes():
        sheet = scene.sheet(axis)
        layers = [(voxels.response(sheet, largest), held) for voxels, held in scene.layers()]
        waves, group = np.unique(scene.nuclear[members], axis=0, return_inverse=True)
        for number, wave in enumerate(waves):
            field = wound_field(scene, layers, wave)
            for shot in members[group.reshape(-1) == number]:
                factor = np.complex64(scene.protocol.amplitude[shot])
                images[shot] = detect(field, scene.sensor[shot]) * factor
                done += 1
            if progress:
                progress(done, shots)
    return images


def wound_field(
    scene: Scene, layers: Sequence[tuple[VoxelResponse, NDArray[Any]]], wave: Wavevectors
) -> Samples:
    """Field along the sensing axis at the places, (components, places y, x), by convolution.

    Layers hold (components, ny, nx): species, or times.
    """
    rows, columns = scene.padded
    count = len(layers[0][1]) if layers else len(scene.magnetisation)
    total = np.zeros((count, rows, columns), np.complex64)
    wound = np.exp(1j * wave[1] * scene.y)[:, None] * np.exp(1j * wave[0] * scene.x)
    wound = wound.astype(np.complex64)
    for response, content in layers:
        spectrum = scipy.fft.fft(content * wound, columns, axis=-1, workers=2)
        spectrum = scipy.fft.fft(spectrum, rows, axis=-2, workers=2)
        spectrum *= response.spectrum(wave)
        total += spectrum
    where_y, where_x = (
        np.arange(-m, p - m) for m, p in zip(scene.margin, scene.places, strict=True)
    )
    field = scipy.fft.ifft(total, axis=-2, workers=2, overwrite_x=True)[:, where_y]
    field = scipy.fft.ifft(field, axis=-1, workers=2, overwrite_x=True)
    return np.asarray(field[..., where_x])


def detector(scene: Scene) -> Callable[[Samples, Wavevectors], Samples]:
    """The function (field at the places, q) → channels, (species, cy, cx)."""
    (dy, dx), (ny, nx) = scene.grid.voxel[1:], scene.grid.shape[1:]
    (my, mx), (py, px) = scene.margin, scene.places
    y, x = scene.y[0] + np.arange(-my, py - my) * dy, scene.x[0] + np.arange(-mx, px - mx) * dx
    cy, cx = scene.instrument.detector.channels()
    transfer, fading = _light_transfer(scene), _fading(scene)

    def detect(field: Samples, wave: Wavevectors) -> Samples:
        wound_y, wound_x = (
            np.exp(1j * k * place).astype(np.complex64) for k, place in ((wave[1], y), (wave[0], x))
        )
        light = field * (wound_y[:, None] * wound_x * fading)
        light = scipy.fft.fft2(light, workers=2, overwrite_x=True)
        light *= transfer
        light = scipy.fft.ifft2(light, workers=2, overwrite_x=True)
        view = light[:, my : my + ny, mx : mx + nx]
        pixels = view.reshape(-1, cy, ny // cy, cx, nx // cx)
        return np.asarray(pixels.mean(axis=(2, 4)))

    return detect


def _fading(scene: Scene) -> NDArray[np.float32]:
    """1 over the view and the inner half of its margin, then falling to 0, (places y, x).

    So the transform that blurs the light meets no jump where the region wraps.
    """
    sides = []
    for count, places, margin in zip(scene.grid.shape[1:], scene.places, scene.margin, strict=True):
        centre = margin + (count - 1) / 2
        beyond = np.abs(np.arange(places) - centre) - (count - 1) / 2
        depth = np.clip((beyond - margin / 2) / max(margin / 2, 1), 0, 1)
        sides.append(np.cos(np.pi / 2 * depth) ** 2)
    return np.asarray(sides[0][:, None] * sides[1], np.float32)


def _light_transfer(scene: Scene) -> NDArray[np.float32]:
    """Mean over a fine voxel and, for a camera, optical blur, on the places' lattice (y, x)."""
    wave_y, wave_x = (
        2 * np.pi * scipy.fft.fftfreq(count, edge)
        for count, edge in zip(scene.places, scene.grid.voxel[1:], strict=True)
    )
    _, edge_y, edge_x = scene.grid.voxel
    transfer = pixel_footprint(wave_y[:, None], wave_x, (edge_y, edge_x))
    if isinstance(scene.instrument.detector, Camera):
        optics = scene.instrument.optics
        wave = np.hypot(wave_y[:, None], wave_x)
        transfer *= optical_transfer(wave, optics.numerical_aperture, optics.wavelength)
    return np.asarray(transfer, np.float32)
