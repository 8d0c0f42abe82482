"""Small asymmetric results with lines at known shifts, for the tests of files and pages."""

from __future__ import annotations

import numpy as np

from recon.grid import Grid
from recon.result import Account, Cube, SpeciesMaps

LARMOR = 4.2577e6
REFERENCE = 4.70
SHIFT = 1.33


def account() -> Account:
    return Account(
        prior="piecewise constant (test)",
        weights={"total variation": 0.7},
        why_stopped="residuals fell below the tolerance",
        misfit=1.01,
        provenance={"versions": {"nearspin": "0"}, "protocol_sha256": "abc"},
        remarks=("intervals can be too narrow",),
    )


def grid(voxel_um: tuple[float, float, float] = (4.0, 2.0, 3.0)) -> Grid:
    return Grid((3, 4, 5), tuple(edge * 1e-6 for edge in voxel_um), base_height=1e-6)


def maps(on: Grid | None = None) -> SpeciesMaps:
    """Values that grow along each axis differently; the error is constant per species."""
    on = on or grid()
    z, y, x = np.meshgrid(*(np.arange(n) for n in on.shape), indexing="ij")
    first = (100 * z + 10 * y + x).astype(np.float32)
    values = np.stack([first, 0.5 * first[::-1]])
    error = np.broadcast_to(np.float32([[[[3.0]]], [[[30.0]]]]), values.shape).copy()
    resolution = np.tile(np.float64([8e-6, 4e-6, 6e-6]), (2, on.shape[0], 1))
    return SpeciesMaps(on, values, account(), error, resolution, names=("lactate", "lipid CH2"))


def cube(on: Grid | None = None, times: int = 64) -> Cube:
    """One line at SHIFT of decay 20 ms, its amount growing along x."""
    on = on or grid()
    t = np.arange(times) * 2e-3
    line = np.exp(-2j * np.pi * (SHIFT - REFERENCE) * 1e-6 * LARMOR * t - t / 20e-3)
    amount = np.arange(1, on.shape[2] + 1) * np.ones(on.shape)
    values = (line[:, None, None, None] * amount).astype(np.complex64)
    error = np.full(values.shape, 0.1, np.float32)
    resolution = 1e-6 * np.random.default_rng(3).random((times, on.shape[0], 3))
    return Cube(
        on,
        values,
        account(),
        error,
        resolution,
        sample_times=t,
        larmor_frequency=LARMOR,
        reference_shift_ppm=REFERENCE,
    )
