"""A static field that differs from voxel to voxel: its map from the cube itself, and its removal.

All lines of a voxel move together by Δf(r). Every voxel's shift is fitted with the known lines, of
which the strongest tell most. A polynomial of low degree in (z, y, x) is drawn through the shifts,
each weighted by its information; Schwarz's criterion chooses the degree (Ann. Stat. 6:461, 1978).
The corrected cube is M(r, t) exp(+i 2π Δf(r) t).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray

from recon.errors import InputError
from recon.grid import Grid
from recon.quantify.fit import Fit
from recon.quantify.nuisance import Nuisance
from recon.quantify.patterns import Pattern
from recon.result import Cube

FloatArray = NDArray[np.floating]

TIE_HZ = 3.0
HUBER = 2.0
ROUNDS = 10
BLOCKS = 6


@dataclass(frozen=True, eq=False)
class FieldShift:
    """A map of shifts.

    Attributes
    ----------
    grid
        The voxel grid.
    shift_Hz, standard_error_Hz
        (nz, ny, nx); positive towards higher ppm.
    degree
        Of the polynomial.
    scatter
        Of the voxels' own shifts about the map, in their standard errors.
    """

    grid: Grid
    shift_Hz: FloatArray  # noqa: N815
    standard_error_Hz: FloatArray  # noqa: N815
    degree: int
    scatter: float

    def corrected(self, cube: Cube) -> Cube:
        """The cube with every voxel's lines moved back to their places.

        Raises
        ------
        InputError
            Another grid.
        """
        if cube.grid != self.grid:
            raise InputError("is on another grid than the cube", "field shift")
        times = np.asarray(cube.sample_times)[:, None, None, None]
        turn = np.exp(2j * np.pi * self.shift_Hz * times).astype(np.complex64)
        low, high = float(self.shift_Hz.min()), float(self.shift_Hz.max())
        error = float(np.sqrt((self.standard_error_Hz**2).mean()))
        remark = f"static field shifts from {low:+.2g} to {high:+.2g} Hz (± {error:.2g}) taken out"
        account = replace(cube.account, remarks=(*cube.account.remarks, remark))
        return replace(cube, values=cube.values * turn, account=account)


@dataclass(frozen=True)
class ShiftEstimate:
    """How to estimate it.

    Attributes
    ----------
    bound_Hz
        Largest magnitude.
    degrees
        Degrees of polynomial to choose from.
    """

    bound_Hz: float = 30.0  # noqa: N815
    degrees: tuple[int, ...] = (0, 1, 2, 3, 4)

    def estimate(
        self, cube: Cube, patterns: Sequence[Pattern], noise_sd: FloatArray | None = None
    ) -> FieldShift:
        """The map from all lines together; the strongest tell most.

        Raises
        ------
        InputError
            No pattern, no noise, or no voxel in which the lines tell a shift.
        """
        fitted = Fit(shift_Hz=Nuisance(self.bound_Hz, TIE_HZ)).fit(cube, patterns, noise_sd)
        variance = fitted.nuisance_error[0].astype(float) ** 2
        # what the voxel itself knows, without its neighbours
        information = np.where(variance > 0, 1 / np.maximum(variance, 1e-12) - 1 / TIE_HZ**2, 0)
        information *= np.abs(fitted.shift_Hz) < 0.999 * self.bound_Hz
        information = np.where(information > 0.1 / TIE_HZ**2, information, 0)
        if not information.any():
            raise InputError(
                "its lines tell no shift in any voxel", "cube", "give stronger lines, or less noise"
            )
        shift = fitted.shift_Hz.astype(float)
        alike = _drawn_through(shift, information, max(self.degrees), 1.0)[-1]
        fits = [_drawn_through(shift, information, degree, alike) for degree in self.degrees]
        best = min(fits, key=lambda one: one[0])
        _, shift, error, degree, scatter, _ = best
        return FieldShift(cube.grid, shift, error, degree, scatter)


def _drawn_through(
    shift: FloatArray, information: FloatArray, degree: int, alike: float
) -> tuple[float, FloatArray, FloatArray, int, float, float]:
    """Criterion, map, its standard error, degree, scatter about it, and that of blocks.

    `alike`: how many voxels count as one. Huber's weights.
    """
    basis = _polynomials(shift.shape, degree)
    seen = information.ravel() > 0
    rows, values, weight = basis[seen], shift.ravel()[seen], information.ravel()[seen]
    robust = np.ones(len(values))
    for _ in range(ROUNDS):
        scaled = rows * np.sqrt(weight * robust)[:, None]
        normal = scaled.T @ scaled + 1e-9 * np.eye(rows.shape[1]) * np.trace(scaled.T @ scaled)
        found = np.linalg.solve(normal, rows.T @ (weight * robust * values))
        rest = np.abs(values - rows @ found) * np.sqrt(weight)
        size = max(1.0, 1.4826 * float(np.median(rest)))
        robust = np.minimum(1, HUBER * size / np.maximum(rest, 1e-30))
    scatter = float(np.sqrt((robust * rest**2).sum() / max(robust.sum() - len(found), 1)))
    signed = np.zeros(shift.size)
    signed[seen] = (values - rows @ found) * np.sqrt(weight) * robust
    together = max(1.0, _clustered(signed, shift.shape))
    covariance = np.linalg.inv(normal) * max(1.0, scatter**2, together, alike)
    error = np.sqrt(np.einsum("vi,ij,vj->v", basis, covariance, basis))
    count = max(len(values) / max(alike, 1.0), 2.0)
    criterion = count * np.log(max((robust * rest**2).mean(), 1e-30)) + len(found) * np.log(count)
    shape = shift.shape
    drawn = (basis @ found).reshape(shape)
    return criterion, drawn, error.reshape(shape), degree, scatter, together


def _clustered(score: FloatArray, shape: tuple[int, ...]) -> float:
    """Variance of sums of residuals over blocks of the slice, in units of independent ones.

    Neighbours under a prior err together; blocks reach through all heights and over a sixth of
    each side. Source: cluster-robust variance, Liang & Zeger, Biometrika 73:13 (1986).
    """
    _, ny, nx = shape
    place = np.arange(BLOCKS)
    rows, columns = np.arange(ny) * BLOCKS // ny, np.arange(nx) * BLOCKS // nx
    into_y, into_x = (
        (rows == place[:, None]).astype(float),
        (columns == place[:, None]).astype(float),
    )
    values = score.reshape(shape)
    sums = into_y @ values.sum(axis=0) @ into_x.T
    counts = into_y @ (values != 0).sum(axis=0) @ into_x.T
    return float((sums**2).sum() / max(counts.sum(), 1))


def _polynomials(shape: tuple[int, ...], degree: int) -> FloatArray:
    """Products of Legendre polynomials of total degree up to `degree`, (voxels, terms)."""
    sides = []
    for count in shape:
        place = np.linspace(-1, 1, count) if count > 1 else np.zeros(1)
        sides.append(legendre.legvander(place, degree).T)
    terms = [
        np.einsum("z,y,x->zyx", sides[0][a], sides[1][b], sides[2][c]).ravel()
        for a in range(min(degree, shape[0] - 1) + 1)
        for b in range(min(degree - a, shape[1] - 1) + 1)
        for c in range(min(degree - a - b, shape[2] - 1) + 1)
    ]
    return np.stack(terms, axis=1)
