"""Small spheres in a specimen: where they lie, and their exact volume on any voxel grid."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree
from scipy.spatial.transform import Rotation

from recon.grid import Grid

FloatArray = NDArray[np.floating]
Float32Array = NDArray[np.float32]

SAMPLES_PER_EDGE = 4
MOST_SAMPLES = 24


@dataclass(frozen=True)
class Droplets:
    """Spheres: centres (D, 3) as (x, y, z) and radii (D,), metres."""

    centres: FloatArray
    radii: FloatArray

    def kept(self, chosen: NDArray[np.bool_]) -> Droplets:
        """The chosen droplets."""
        return Droplets(self.centres[chosen], self.radii[chosen])

    def apart(self) -> Droplets:
        """Without overlaps: of two that touch, the smaller goes (the later, if equal)."""
        if not len(self.radii):
            return self
        order = np.argsort(-self.radii, kind="stable")
        centres, radii = self.centres[order], self.radii[order]
        pairs = cKDTree(centres).query_pairs(2 * float(radii[0]), output_type="ndarray")
        gaps = np.linalg.norm(centres[pairs[:, 0]] - centres[pairs[:, 1]], axis=1)
        touching = pairs[gaps < radii[pairs[:, 0]] + radii[pairs[:, 1]]]
        keep = np.ones(len(radii), bool)
        for larger, smaller in touching[np.lexsort(touching.T[::-1])]:
            if keep[larger]:
                keep[smaller] = False
        return Droplets(centres[keep], radii[keep])

    def volume_fraction(self, grid: Grid, refinement: tuple[int, int, int]) -> Float32Array:
        """Share of each sub-voxel filled by droplets, (nz·rz, ny·ry, nx·rx), 0 to 1.

        Each sphere is filled with evenly spread points of equal volume that are counted into the
        sub-voxels, so that its volume is kept at any size; parts outside the grid are lost.
        """
        fine = grid.refined(refinement)
        edges = np.array(fine.voxel[::-1])
        first = [positions[0] for positions in grid.sub_positions(refinement)[::-1]]
        corner = np.array(first) - edges / 2
        total = np.zeros(fine.size)
        wanted = np.ceil(SAMPLES_PER_EDGE * 2 * self.radii / edges.min())
        samples = np.clip(wanted, 6, MOST_SAMPLES).astype(int)
        for across in np.unique(samples):
            these = self.kept(samples == across)
            ball = ball_points(int(across))
            points = these.centres[:, None] + these.radii[:, None, None] * ball
            volume = 4 / 3 * np.pi * these.radii**3 / len(ball)
            place = np.floor((points - corner) / edges).astype(np.int64)[..., ::-1]
            within = ((place >= 0) & (place < fine.shape)).all(axis=-1)
            flat = np.ravel_multi_index(tuple(place[within].T), fine.shape)
            share = np.broadcast_to(volume[:, None], within.shape)[within] / edges.prod()
            total += np.bincount(flat, share, fine.size)
        return np.minimum(total, 1).reshape(fine.shape).astype(np.float32)


def ball_points(across: int) -> FloatArray:
    """Points evenly spread in the unit ball, `across` along a diameter, (P, 3).

    A cubic lattice, turned so that none of its planes lies along a grid's.
    """
    line = (np.arange(across) + 0.5) * 2 / across - 1
    cube = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
    ball = cube[(cube**2).sum(axis=1) <= 1]
    return np.asarray(Rotation.from_euler("zyx", (0.31, 0.47, 0.63)).apply(ball))
