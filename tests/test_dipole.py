"""The near-field response, against a general magnetics library and against quadrature."""

from __future__ import annotations

import magpylib
import numpy as np
import pytest

from recon.physics.dipole import (
    field_kernel,
    lateral_footprint,
    magnetisation_direction,
    precession_frame,
)

MICRON = 1e-6
DIAGONAL = np.array([1.0, 1.0, 1.0]) / np.sqrt(3)
ORIENTATIONS = {
    "both along z": ([0, 0, 1], [0, 0, 1]),
    "diagonal, bias along it": (DIAGONAL, DIAGONAL),
    "diagonal, bias along z": (DIAGONAL, [0, 0, 1]),
    "diagonal, bias in the face": ([-1, 1, 1] / np.sqrt(3), [0, 1, 0]),
    "in the face, bias oblique": ([1, 0, 0], [0.3, -0.8, 0.52]),
}


def wavenumbers(count: int, step: float) -> np.ndarray:
    return 2 * np.pi * np.fft.fftfreq(count, step)


def field_of_cuboid(sensing, bias, height, edges, depth, thickness, places):
    """Layer-averaged n·B of a cuboid of magnetisation m (1 A/m), by magpylib (5.x)."""
    direction = magnetisation_direction(bias)
    nodes, weights = np.polynomial.legendre.leggauss(8)
    total = np.zeros(places.shape[:-1], complex)
    for part, factor in ((direction.real, 1.0), (direction.imag, 1j)):
        if not np.any(part):
            continue
        body = magpylib.magnet.Cuboid(
            magnetization=part, dimension=edges[::-1], position=(0, 0, height)
        )
        for node, weight in zip(nodes, weights, strict=True):
            below = depth + thickness * (node + 1) / 2
            observers = np.concatenate([places, np.full((*places.shape[:-1], 1), -below)], -1)
            total += factor * weight / 2 * (body.getB(observers) @ np.asarray(sensing, float))
    return total


@pytest.mark.parametrize("name", ORIENTATIONS)
def test_response_agrees_with_a_magnetics_library(name: str) -> None:
    sensing, bias = ORIENTATIONS[name]
    edges, depth, thickness = (2 * MICRON, 1.5 * MICRON, 2.5 * MICRON), 0.5 * MICRON, 3 * MICRON
    heights = np.array([1.0, 3.0, 9.0]) * MICRON
    count, step = 1280, 0.2 * MICRON
    ky = kx = wavenumbers(count, step)
    kernel = field_kernel(
        ky, kx, heights, edges[0], sensing, magnetisation_direction(bias), depth, thickness
    )
    kernel *= lateral_footprint(ky, edges[1])[:, None] * lateral_footprint(kx, edges[2])
    image = np.fft.ifft2(kernel) * (edges[1] * edges[2] / step**2)
    index = np.arange(-40, 41, 5)
    places = np.stack(np.meshgrid(index * step, index * step, indexing="xy"), -1)  # (y, x, [x, y])
    for level, height in enumerate(heights):
        outside = field_of_cuboid(sensing, bias, height, edges, depth, thickness, places)
        difference = np.abs(image[level][np.ix_(index, index)] - outside).max()
        assert difference <= 0.005 * np.abs(outside).max()


def test_axial_phase_agrees_with_thin_sheets() -> None:
    ky, kx = wavenumbers(6, 1.3 * MICRON), wavenumbers(5, 1.7 * MICRON)
    direction, turn = magnetisation_direction([0.1, 0.4, 0.9]), 1.9e6
    heights, thick = np.array([2.0, 5.0]) * MICRON, 3 * MICRON
    whole = field_kernel(ky, kx, heights, thick, DIAGONAL, direction, MICRON, MICRON, turn)
    nodes, weights = np.polynomial.legendre.leggauss(24)
    total = np.zeros_like(whole)
    for node, weight in zip(nodes, weights, strict=True):
        at = heights + node * thick / 2
        sheet = field_kernel(ky, kx, at, 1e-12, DIAGONAL, direction, MICRON, MICRON) / 1e-12
        total += weight * thick / 2 * sheet * np.exp(1j * turn * at)[:, None, None]
    np.testing.assert_allclose(whole, total, rtol=0, atol=1e-6 * np.abs(whole).max())


def test_layer_average_agrees_with_quadrature_over_sheets() -> None:
    ky, kx = wavenumbers(6, 1.3 * MICRON), wavenumbers(5, 1.7 * MICRON)
    direction, heights = magnetisation_direction([0, 0, 1]), np.array([1 * MICRON])
    depth, thickness = 0.4 * MICRON, 2 * MICRON
    whole = field_kernel(ky, kx, heights, MICRON, DIAGONAL, direction, depth, thickness)
    nodes, weights = np.polynomial.legendre.leggauss(20)
    sheets = sum(
        weight
        / 2
        * field_kernel(
            ky, kx, heights, MICRON, DIAGONAL, direction, depth + thickness * (node + 1) / 2, 0.0
        )
        for node, weight in zip(nodes, weights, strict=True)
    )
    np.testing.assert_allclose(whole, sheets, rtol=1e-10, atol=1e-25)


def test_uniform_magnetisation_is_invisible_whatever_its_axial_phase() -> None:
    direction = magnetisation_direction([0, 0, 1])
    for turn in (0.0, 2e6):
        kernel = field_kernel(
            [0.0], [0.0, 1e5], [MICRON], MICRON, DIAGONAL, direction, MICRON, MICRON, turn
        )
        assert kernel[0, 0, 0] == 0
        assert kernel[0, 0, 1] != 0


def test_kernel_is_finite_at_extreme_wavenumbers_and_a_vanishing_layer() -> None:
    direction = magnetisation_direction([0, 0, 1])
    wave = np.array([1e-9, 1.0, 1e6, 1e9, 1e12])
    thin = field_kernel(wave, wave, [2 * MICRON], MICRON, DIAGONAL, direction, MICRON, 1e-15)
    sheet = field_kernel(wave, wave, [2 * MICRON], MICRON, DIAGONAL, direction, MICRON, 0.0)
    assert np.all(np.isfinite(thin))
    np.testing.assert_allclose(thin[:, :3, :3], sheet[:, :3, :3], rtol=1e-8)


@pytest.mark.parametrize("bias", [[0, 0, 1], [0, 0, -2], [1, 0, 0], [0.3, -0.8, 0.52]])
def test_precession_frame_is_right_handed(bias) -> None:
    first, second = precession_frame(bias)
    unit = np.asarray(bias) / np.linalg.norm(bias)
    np.testing.assert_allclose(np.cross(first, second), unit, atol=1e-12)
    np.testing.assert_allclose([first @ second, first @ first], [0, 1], atol=1e-12)


def test_protons_turn_clockwise_about_the_bias() -> None:
    """dM/dt = γ M × B: from x, protons in a field along z start towards −y (Bloch's equations)."""
    moment = magnetisation_direction([0, 0, 1])
    later = np.real(moment * np.exp(-1j * 0.1))
    np.testing.assert_allclose(np.real(moment), [1, 0, 0])
    assert later[1] < 0


def test_lateral_footprint_is_the_average_of_a_wave_over_the_edge() -> None:
    wave, edge = 1.7e6, 2.2 * MICRON
    places = (np.arange(20000) + 0.5) / 20000 * edge - edge / 2
    assert lateral_footprint(wave, edge) == pytest.approx(np.cos(wave * places).mean(), abs=1e-8)
