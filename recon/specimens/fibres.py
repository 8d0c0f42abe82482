"""Where the fibres of a muscle cross-section run: an analytic mosaic, defined at any position.

The section is a power diagram of leaning fibre axes inside a rounded outline. A point belongs to
the fibre of least power |ρ − c_i(z)|² − w_i, and its distance to the wall shared with fibre j is

    d_ij = (|ρ − c_j|² − w_j − |ρ − c_i|² + w_i) / (2 |c_j − c_i|),

a signed distance to a straight wall. The walls, the outline and the capillaries are joined by
the smooth minimum −s ln Σ exp(−d/s), which rounds the corners and leaves the small gaps between
three fibres in which capillaries run. A gentle warp of space bends the straight walls. Nothing
here knows a voxel grid. All lengths are metres; positions are (x, y) and a height z.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import Delaunay, cKDTree

FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]

NEIGHBOURS = 9
MICRON = 1e-6


@dataclass(frozen=True)
class Outline:
    """A rounded rectangle: centre (x, y), half widths (x, y) and corner radius, metres."""

    centre: tuple[float, float]
    half_width: tuple[float, float]
    corner: float

    def depth(self, x: FloatArray, y: FloatArray) -> FloatArray:
        """Signed distance inside the outline (positive inside), metres."""
        offset_x = np.abs(x - self.centre[0]) - self.half_width[0] + self.corner
        offset_y = np.abs(y - self.centre[1]) - self.half_width[1] + self.corner
        outside = np.hypot(np.maximum(offset_x, 0), np.maximum(offset_y, 0))
        inside = np.minimum(np.maximum(offset_x, offset_y), 0)
        return np.asarray(self.corner - outside - inside)

    def random_points(self, count: int, random: np.random.Generator) -> FloatArray:
        """Uniform points inside the outline, (about count, 2)."""
        reach = np.array(self.half_width)
        points = np.array(self.centre) + random.uniform(-1, 1, (count, 2)) * reach
        return np.asarray(points[self.depth(points[:, 0], points[:, 1]) > 0])


@dataclass(frozen=True)
class Warp:
    """A gentle displacement of space: a few sinusoids.

    wavevector (K, 3) rad/m along (x, y, z); amplitude (K, 2) metres along (x, y); phase (K,).
    """

    wavevector: FloatArray
    amplitude: FloatArray
    phase: FloatArray

    @classmethod
    def random(cls, random: np.random.Generator, size: float = 0.9 * MICRON) -> Warp:
        """Eight sinusoids, 45–110 µm long across and 90–250 µm along the fibres."""
        count = 8
        across = 2 * np.pi / random.uniform(45e-6, 110e-6, count)
        along = 2 * np.pi / random.uniform(90e-6, 250e-6, count)
        turn = random.uniform(0, 2 * np.pi, count)
        wavevector = np.stack([across * np.cos(turn), across * np.sin(turn), along], axis=1)
        amplitude = random.normal(0, size, (count, 2))
        return cls(wavevector, amplitude, random.uniform(0, 2 * np.pi, count))

    def __call__(
        self, x: FloatArray, y: FloatArray, z: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Displaced (x, y)."""
        new_x, new_y = np.array(x), np.array(y)
        for (kx, ky, kz), (ax, ay), phase in zip(
            self.wavevector, self.amplitude, self.phase, strict=True
        ):
            wave = np.sin(kx * x + ky * y + kz * z + phase)
            new_x += ax * wave
            new_y += ay * wave
        return new_x, new_y


@dataclass(frozen=True)
class Location:
    """What lies at each asked point, (N,) each.

    fibre: number of the owning fibre; depth: distance beneath that fibre's membrane, negative
    outside it; inside: distance inside the section's outline; vessel: distance inside the nearest
    capillary, negative outside; metres.
    """

    fibre: IntArray
    depth: FloatArray
    inside: FloatArray
    vessel: FloatArray


@dataclass(frozen=True)
class Mosaic:
    """The fibres of one section.

    centres (F, 2) at the middle height, lean (F, 2) as dx/dz and dy/dz, weights (F,) m² of the
    power diagram, junctions (V, 3) the fibre triples between which a capillary of `vessel_radius`
    runs. `seam` is the gap between facing fibres, `rounding` the length s of the smooth minimum.
    """

    outline: Outline
    middle: float
    centres: FloatArray
    lean: FloatArray
    weights: FloatArray
    junctions: IntArray
    warp: Warp
    seam: float
    rounding: float
    vessel_radius: float

    def locate(self, x: FloatArray, y: FloatArray, z: FloatArray) -> Location:
        """Owner and signed distances at points x, y, z, (N,) metres each."""
        common = self.lean.mean(axis=0)
        upright_x = x - common[0] * (z - self.middle)
        upright_y = y - common[1] * (z - self.middle)
        x, y = self.warp(upright_x, upright_y, z)
        inside = self.outline.depth(x, y)
        vessel = self._vessel_depth(x, y, z, common)
        fibre, walls = self._walls(x, y, z, common)
        gap = inside - self.seam
        clear = -vessel - self.seam / 2
        distances = np.concatenate([walls, gap[None], clear[None]])
        depth = smooth_minimum(distances, self.rounding) - self.seam / 2
        return Location(fibre, depth, inside, vessel)

    def _walls(
        self, x: FloatArray, y: FloatArray, z: FloatArray, common: FloatArray
    ) -> tuple[IntArray, FloatArray]:
        """Owning fibre (N,) and signed distances to its walls (neighbours, N)."""
        count = min(NEIGHBOURS, len(self.centres))
        _, near = cKDTree(self.centres).query(np.stack([x, y], axis=1), k=range(1, count + 1))
        near = np.ascontiguousarray(near.T)
        rise, lean = z - self.middle, self.lean - common
        centre_x = self.centres[:, 0][near] + lean[:, 0][near] * rise
        centre_y = self.centres[:, 1][near] + lean[:, 1][near] * rise
        power = (x - centre_x) ** 2 + (y - centre_y) ** 2 - self.weights[near]
        owner = power.argmin(axis=0)[None]

        def of_owner(values: NDArray[Any]) -> NDArray[Any]:
            return np.take_along_axis(values, owner, axis=0)

        apart = np.hypot(centre_x - of_owner(centre_x), centre_y - of_owner(centre_y))
        excess = power - of_owner(power)
        np.put_along_axis(excess, owner, np.inf, axis=0)
        np.put_along_axis(apart, owner, 1.0, axis=0)
        return of_owner(near)[0], excess / (2 * apart)

    def _vessel_depth(
        self, x: FloatArray, y: FloatArray, z: FloatArray, common: FloatArray
    ) -> FloatArray:
        """Signed distance inside the nearest capillary, (N,)."""
        if not len(self.junctions):
            return np.full(x.shape, -np.inf)
        near_one = np.full(x.shape, np.inf)
        lean = self.lean - common
        start = power_centres(self.centres, self.weights, self.junctions)
        moved = power_centres(self.centres + lean * MICRON, self.weights, self.junctions)
        slope = (moved - start) / MICRON
        for (vessel_x, vessel_y), (slope_x, slope_y) in zip(start, slope, strict=True):
            rise = z - self.middle
            away = np.hypot(x - vessel_x - slope_x * rise, y - vessel_y - slope_y * rise)
            np.minimum(near_one, away, out=near_one)
        return self.vessel_radius - near_one


def smooth_minimum(distances: FloatArray, length: float) -> FloatArray:
    """−s ln Σ exp(−d/s) over the first axis: the minimum with its corners rounded over s."""
    least = distances.min(axis=0)
    excess = np.exp(-(distances - least) / length).sum(axis=0)
    return np.asarray(least - length * np.log(excess))


def power_centres(centres: FloatArray, weights: FloatArray, triples: IntArray) -> FloatArray:
    """Points of equal power to three fibres each, (V, 2): the corners of the mosaic."""
    first, second, third = (centres[triples[:, i]] for i in range(3))
    lifted = (centres**2).sum(axis=1) - weights
    matrix = 2 * np.stack([second - first, third - first], axis=1)
    right = np.stack([lifted[triples[:, i]] - lifted[triples[:, 0]] for i in (1, 2)], axis=1)
    return np.asarray(np.linalg.solve(matrix, right[..., None])[..., 0])


def relaxed_centres(
    outline: Outline, count: int, random: np.random.Generator, rounds: int = 6
) -> FloatArray:
    """Fibre axes spread through the outline by a few rounds of Lloyd's relaxation, (F, 2).

    Few rounds leave the spread of sizes that real fibres have (S. Lloyd, IEEE Trans. Inf.
    Theory 28:129, 1982).
    """
    cloud = outline.random_points(600 * count, random)
    centres = outline.random_points(20 * count, random)[:count]
    for _ in range(rounds):
        _, owner = cKDTree(centres).query(cloud)
        weight = np.bincount(owner, minlength=count)
        sums = [np.bincount(owner, cloud[:, axis], count) for axis in (0, 1)]
        centres = np.stack(sums, axis=1) / np.maximum(weight, 1)[:, None]
    return centres


def mosaic_junctions(outline: Outline, centres: FloatArray, weights: FloatArray) -> IntArray:
    """Fibre triples whose corner lies well inside the outline, (V, 3)."""
    triples = Delaunay(centres).simplices
    corners = power_centres(centres, weights, triples)
    power = ((corners[:, None] - centres) ** 2).sum(axis=2) - weights
    shared = np.take_along_axis(power, triples[:, :1], axis=1)[:, 0]
    true_corner = shared <= power.min(axis=1) + 1e-3 * MICRON**2
    well_inside = outline.depth(corners[:, 0], corners[:, 1]) > 8 * MICRON
    return np.asarray(triples[true_corner & well_inside])


def neighbour_pairs(centres: FloatArray) -> IntArray:
    """Pairs of fibres that touch (edges of the Delaunay triangulation), (P, 2)."""
    simplices = Delaunay(centres).simplices
    pairs = np.concatenate([simplices[:, [0, 1]], simplices[:, [1, 2]], simplices[:, [0, 2]]])
    return np.unique(np.sort(pairs, axis=1), axis=0)
