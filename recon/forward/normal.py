"""Blocks of the normal operator AᴴWA for a unit time course, before any data exist."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from recon.forward.layout import Layout
from recon.forward.operator import ForwardOperator, fold

ComplexArray = NDArray[np.complexfloating]


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
    """Shots with the same response differ by a shift: products once, then slices of their sum."""
    tables, encoding = operator.tables, operator.model.encoding
    nz, ny, nx = operator.model.grid.shape
    upper = np.triu_indices(nz)
    total = np.zeros((len(upper[0]), 2 * ny, 2 * nx), np.complex64)
    strength = encoding.weight * np.abs(encoding.amplitude) ** 2
    order = sorted(range(len(encoding)), key=lambda shot: (tables.keys[shot], strength[shot]))
    last, product = None, np.zeros((0, 0, 0), np.complex64)
    for shot in order:
        key = (tables.keys[shot], float(strength[shot]))
        if key != last:
            kernel, conjugate = tables.response(shot)
            factor = np.full((ny, nx), strength[shot], np.float32)
            if not tables.fused:
                factor *= np.abs(tables.transfer(shot)).astype(np.float32) ** 2
            product, last = conjugate[upper[0]] * (kernel * factor)[upper[1]], key
        rows, columns = tables.windows[shot]
        seen = total[:, rows, columns]
        seen += product
    total *= (operator.footprint**2).astype(np.float32)
    normal = np.zeros((nz, nz, ny, nx), np.complex64)
    normal[upper] = fold(total, (ny, nx))
    return normal


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
