"""Local resolution: how wide an estimate makes a point, per component, depth and direction.

A point of one scaled unit added to the object changes b by G e; the change of the estimate is the
local point response. For linear estimates it is exact; for penalised ones it is the finite
difference at the estimate, from its warm start. Several points far apart share one solve, and their
responses are averaged.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.forward.blocks import BlockQuadratic

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]
Edges = tuple[float, float, float]


@dataclass(frozen=True, eq=False)
class Responses:
    """Point responses.

    Attributes
    ----------
    width
        Full width at half maximum along (z, y, x), metres, (components, nz, 3); infinite where the
        response does not fall to half within the grid, NaN where it is not highest at the point.
    recovered
        Share of a point's amount that comes back in its own plane, (components, nz).
    """

    width: FloatArray
    recovered: FloatArray


@dataclass(frozen=True)
class PointResponse:
    """Settings.

    Attributes
    ----------
    spacing
        Distance between points that share a solve, voxels.
    height
        Height of a point in units of the noise of a unit-sensitivity unknown.
    iterations
        Iterations of an iterative solver from its warm start.
    """

    spacing: int = 16
    height: float = 2.0
    iterations: int = 10

    def measure(
        self,
        quadratic: BlockQuadratic,
        voxel: Edges,
        solver: Callable[[Array], Array],
        progress: Callable[[int, int], None] | None = None,
    ) -> Responses:
        """Responses of `solver`, a map from b to the estimate, about the record's b."""
        components, nz, ny, nx = quadratic.shape
        places = self._places(ny, nx)
        width = np.full((components, nz, 3), np.nan)
        recovered = np.zeros((components, nz))
        b = quadratic.linear
        before = solver(b)
        for number in range(components * nz):
            component, depth = divmod(number, nz)
            points = np.zeros(quadratic.shape, quadratic.dtype)
            points[component, depth, places[0], places[1]] = self.height
            change = (solver(b + quadratic.normal(points)) - before).real / self.height
            response = _averaged(change[component], places)
            width[component, depth] = _widths(response, depth, voxel)
            recovered[component, depth] = change[component, depth].sum() / len(places[0])
            if progress is not None:
                progress(number + 1, components * nz)
        return Responses(width.astype(np.float32), recovered.astype(np.float32))

    def _places(self, ny: int, nx: int) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """A lattice of points over the middle of the plane."""
        rows, columns = (
            np.arange(side // 2 % self.spacing, side, self.spacing)
            if side > self.spacing
            else np.array([side // 2])
            for side in (ny, nx)
        )
        y, x = np.meshgrid(rows, columns, indexing="ij")
        return y.ravel(), x.ravel()


def resting_on_prior(recovered: FloatArray) -> tuple[str, ...]:
    """One line per component that names the planes where less than half of a point comes back."""
    found = []
    for component, shares in enumerate(recovered, start=1):
        weak = [str(plane) for plane, share in enumerate(shares, start=1) if share < 0.5]
        if weak:
            found.append(
                f"component {component}, planes from below {', '.join(weak)}: less than half of a "
                "point's amount comes back in its own plane, so these values rest on the prior "
                "more than on data and their intervals can be too narrow"
            )
    return tuple(found)


def _averaged(change: FloatArray, places: tuple[NDArray[np.intp], NDArray[np.intp]]) -> FloatArray:
    """Mean response (nz, ny, nx) with the point moved to the middle of the plane."""
    _, ny, nx = change.shape
    total = np.zeros_like(change)
    for y, x in zip(*places, strict=True):
        total += np.roll(change, (ny // 2 - y, nx // 2 - x), (1, 2))
    return total / len(places[0])


def _widths(response: FloatArray, depth: int, voxel: Edges) -> tuple[float, float, float]:
    """Full widths at half maximum along (z, y, x) through the point."""
    _, ny, nx = response.shape
    y, x = ny // 2, nx // 2
    lines = (response[:, y, x], response[depth, :, x], response[depth, y])
    along_z, along_y, along_x = (
        full_width(line, place) * edge
        for line, place, edge in zip(lines, (depth, y, x), voxel, strict=True)
    )
    return along_z, along_y, along_x


def full_width(line: FloatArray, peak: int) -> float:
    """Full width at half maximum in samples, linear between samples.

    An end of the line counts as the edge of its last sample: infinite only if neither side falls
    to half. NaN if the line is not highest at the peak.
    """
    top = float(line[peak])
    if not top > 0 or line.max() > 1.001 * top:
        return float("nan")
    sides = [_half_width(line[peak:], top), _half_width(line[peak::-1], top)]
    if not np.isfinite(sides).any():
        return float("inf")
    return float(sum(side if np.isfinite(side) else min(sides) for side in sides))


def _half_width(line: FloatArray, top: float) -> float:
    """Where a line that starts at its top falls to half of it."""
    below = np.flatnonzero(line < 0.5 * top)
    if not len(below):
        return float("inf")
    first = int(below[0])
    return float(first - 1 + (line[first - 1] - 0.5 * top) / (line[first - 1] - line[first]))
