"""Blocks of the normal operator AᴴWA for a unit time course, before any data exist."""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.forward.layout import Layout
from recon.forward.operator import ForwardOperator, fold
from recon.forward.shot_tables import Window

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

# Above this many shots of equal response a convolution is faster than adding slices.
MANY = 80


def normal_blocks(operator: ForwardOperator) -> tuple[Layout, ComplexArray]:
    """Blocks of G = Σ_j w_j h_j h_jᴴ.

    Returns the layout and (q, q, blocks y, blocks x) complex64, the matrix of ⟨row|G|column⟩.
    """
    model = operator.model
    if model.is_one_detector:
        layout = Layout.of(model.grid.shape, (1, 1))
        normal = _detector_blocks(operator)
    elif model.binning == (1, 1):
        layout = Layout.of(model.grid.shape, (1, 1))
        normal = _camera_blocks(operator)
    else:
        layout = Layout.of(model.grid.shape, model.binning)
        normal = _aliased_blocks(operator, layout)
    for row in range(len(normal)):
        normal[row + 1 :, row] = normal[row, row + 1 :].conj()
    return layout, normal


def _camera_blocks(operator: ForwardOperator) -> ComplexArray:
    """Shots with the same response differ by a shift: products once, then a sum of shifts."""
    tables, encoding = operator.tables, operator.model.encoding
    nz, ny, nx = operator.model.grid.shape
    upper = np.triu_indices(nz)
    total = np.zeros((len(upper[0]), 2 * ny, 2 * nx), np.complex64)
    strength = encoding.weight * np.abs(encoding.amplitude) ** 2
    groups: dict[object, list[int]] = {}
    for shot, key in enumerate(tables.keys):
        groups.setdefault(key, []).append(shot)
    for shots in groups.values():
        kernel, conjugate = tables.response(shots[0])
        if not tables.fused:
            kernel = kernel * np.abs(tables.transfer(shots[0])).astype(np.float32) ** 2
        add = _add_by_transform if len(shots) > MANY else _add_shifted
        windows = [tables.windows[shot] for shot in shots]
        add(total, conjugate, kernel, windows, strength[shots])
    total *= (operator.footprint**2).astype(np.float32)
    normal = np.zeros((nz, nz, ny, nx), np.complex64)
    normal[upper] = fold(total, (ny, nx))
    return normal


def _add_shifted(
    total: ComplexArray,
    left: ComplexArray,
    right: ComplexArray,
    windows: list[Window],
    strength: FloatArray,
) -> None:
    """Add strength · left_z · right_z' at every window, for z ≤ z'."""
    upper = np.triu_indices(len(left))
    product = left[upper[0]] * right[upper[1]]
    for (rows, columns), factor in zip(windows, strength, strict=True):
        seen = total[:, rows, columns]
        seen += product * np.float32(factor)


def _add_by_transform(
    total: ComplexArray,
    left: ComplexArray,
    right: ComplexArray,
    windows: list[Window],
    strength: FloatArray,
) -> None:
    """The same as a convolution with the table of windows, in double precision."""
    shape = total.shape[1:]
    places = np.zeros(shape)
    for (rows, columns), factor in zip(windows, strength, strict=True):
        places[rows.start, columns.start] += factor
    table = scipy.fft.fft2(places)
    for entry, (low, high) in enumerate(zip(*np.triu_indices(len(left)), strict=True)):
        product = scipy.fft.fft2(left[low].astype(complex) * right[high], shape)
        product *= table
        total[entry] += scipy.fft.ifft2(product, overwrite_x=True).astype(np.complex64)


def _aliased_blocks(operator: ForwardOperator, layout: Layout) -> ComplexArray:
    """Coarse pixels: object frequencies that alias onto each other share a block."""
    tables, encoding = operator.tables, operator.model.encoding
    _, ny, nx = operator.model.grid.shape
    q = layout.block_size
    normal = np.zeros((q, q, *layout.blocks), np.complex64)
    for shot, weight in enumerate(encoding.weight):
        rows, columns = tables.windows[shot]
        response = tables.response(shot)[0]
        if not tables.fused:
            response = response * tables.transfer(shot)
        scale = np.sqrt(tables.gain * weight) * np.abs(encoding.amplitude[shot])
        response = response * (operator.footprint[rows, columns] * scale).astype(np.complex64)
        shift = -(np.array([ny // 2, nx // 2]) + encoding.nuclear[shot])
        gathered = layout.gather(np.roll(response, shift, axis=(-2, -1))[None])
        conjugate = gathered.conj()
        for row in range(q):
            normal[row, row:] += conjugate[row] * gathered[row:]
    return normal


def _detector_blocks(operator: ForwardOperator) -> ComplexArray:
    """Rank-one updates at the single object frequency of each shot."""
    tables, grid = operator.tables, operator.model.grid
    nz, ny, nx = grid.shape
    normal = np.zeros((nz, nz, ny, nx), np.complex64)
    for shot, weight in enumerate(operator.model.encoding.weight):
        values, row, column = tables.detector_response(shot)
        values = values * operator.footprint[row, column] * np.sqrt(weight * tables.gain)
        block = np.outer(values.conj(), values)
        normal[:, :, (row - ny) % ny, (column - nx) % nx] += np.triu(block)
    return normal
