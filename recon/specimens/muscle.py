"""An invented cross-section of exercised skeletal muscle.

Three kinds of fibre lie in a mosaic: slow fibres carry lipid droplets, crowded beneath their
membranes; fast fibres are full of lactate after the exercise; fast oxidative fibres lie between.
Thin seams of extracellular water part them, and a few capillaries run in the gaps. The shapes are
analytic (`recon.specimens.fibres`, `recon.specimens.droplets`), so they snap to no voxel grid.
Every number is invented; orders of magnitude are `from memory`.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.grid import Grid
from recon.specimen import Species, Specimen
from recon.specimens.droplets import Droplets
from recon.specimens.fibres import (
    MICRON,
    Location,
    Mosaic,
    Outline,
    Warp,
    mosaic_junctions,
    neighbour_pairs,
    relaxed_centres,
)

FloatArray = NDArray[np.floating]
Float32Array = NDArray[np.float32]

NOTES = (
    "Invented: a made-up cross-section of exercised skeletal muscle drawn by a seeded generator. "
    "Shapes, concentrations, relaxation times, diffusion coefficients and polarisations are "
    "assumptions, not measurements. The metabolites are taken as hyperpolarised and the water as "
    "slightly polarised, so that all four lines have like strengths."
)

SPECIES = (
    Species(
        name="water",
        shift_ppm=4.70,
        equivalent_nuclei=2,
        t2_star_ms=60.0,
        t1_s=0.8,
        diffusion_um2_per_ms=1.5,
        polarisation=2e-5,
    ),
    Species(
        name="creatine",
        shift_ppm=3.03,
        equivalent_nuclei=3,
        t2_star_ms=120.0,
        t1_s=1.2,
        diffusion_um2_per_ms=0.25,
        polarisation=1e-2,
    ),
    Species(
        name="lactate",
        shift_ppm=1.33,
        equivalent_nuclei=3,
        t2_star_ms=150.0,
        t1_s=1.5,
        diffusion_um2_per_ms=0.20,
        polarisation=1e-2,
    ),
    Species(
        name="lipid",
        shift_ppm=0.90,
        equivalent_nuclei=9,
        t2_star_ms=90.0,
        t1_s=0.5,
        diffusion_um2_per_ms=0.02,
        polarisation=2e-3,
    ),
)
"""Water, creatine CH3, lactate CH3 and the three lipid CH3 groups of a triglyceride."""

LIPID = 3
DROPLET_MM = 1040.0
"""Triglyceride in a droplet: 0.92 g/mL over 885 g/mol (triolein; from memory)."""


@dataclass(frozen=True)
class FibreKind:
    """One kind of fibre: its share of all fibres, width, contents and droplets.

    cytosol: water, creatine, lactate, lipid in mM; spread: relative fibre-to-fibre
    spread (1 sd) of creatine and lactate; clusters: droplet clusters per 1000 µm³ of rim;
    singles: lone droplets per 1000 µm³.
    """

    name: str
    share: float
    diameter_um: float
    cytosol: tuple[float, float, float, float]
    spread: float
    clusters: float
    singles: float


FIBRE_KINDS = (
    FibreKind("slow", 0.42, 42.0, (42000.0, 27.0, 7.0, 0.0), 0.08, 4.5, 2.0),
    FibreKind("fast oxidative", 0.33, 46.0, (41500.0, 34.0, 21.0, 0.0), 0.10, 0.6, 0.6),
    FibreKind("fast", 0.25, 54.0, (41000.0, 40.0, 38.0, 0.0), 0.10, 0.0, 0.05),
)
EXTRACELLULAR_MM = (52000.0, 0.5, 14.0, 0.0)
PLASMA_MM = (50000.0, 0.3, 10.0, 0.0)


@dataclass(frozen=True)
class MuscleSize:
    """Voxels (nz, ny, nx), their edges (dz, dy, dx) in µm, and the empty margin on each side."""

    shape: tuple[int, int, int]
    voxel_um: tuple[float, float, float] = (4.0, 4.0, 4.0)
    base_height_um: float = 0.0
    margin: float = 0.125

    @property
    def grid(self) -> Grid:
        """The voxel grid."""
        dz, dy, dx = (edge * MICRON for edge in self.voxel_um)
        return Grid(self.shape, (dz, dy, dx), self.base_height_um * MICRON)


SMALL = MuscleSize((6, 64, 64))
MEDIUM = MuscleSize((6, 96, 96))
LARGE = MuscleSize((8, 128, 128))


@dataclass(frozen=True)
class Muscle:
    """An invented muscle cross-section of a given size; the seed fixes everything in it."""

    size: MuscleSize = field(default=SMALL)
    seed: int = 0

    @classmethod
    def small(cls, seed: int = 0) -> Muscle:
        """64 × 64 × 6 voxels of 4 µm."""
        return cls(SMALL, seed)

    @classmethod
    def medium(cls, seed: int = 0) -> Muscle:
        """96 × 96 × 6 voxels of 4 µm."""
        return cls(MEDIUM, seed)

    @classmethod
    def large(cls, seed: int = 0) -> Muscle:
        """128 × 128 × 8 voxels of 4 µm."""
        return cls(LARGE, seed)

    @property
    def grid(self) -> Grid:
        """The reconstruction grid this section is meant for."""
        return self.size.grid

    @cached_property
    def _random(self) -> tuple[np.random.Generator, ...]:
        seeds = np.random.SeedSequence(self.seed).spawn(4)
        return tuple(np.random.default_rng(seed) for seed in seeds)

    @cached_property
    def outline(self) -> Outline:
        """The section's rounded outline."""
        _, ny, nx = self.grid.shape
        _, dy, dx = self.grid.voxel
        width, height = nx * dx, ny * dy
        half = ((0.5 - self.size.margin) * width, (0.5 - self.size.margin) * height)
        if min(half) < 30 * MICRON:
            raise InputError(
                f"a section {2e6 * min(half):.0f} µm wide holds no mosaic of fibres",
                "muscle size",
                "make it at least 80 µm wide or shrink the margin",
            )
        centre = ((width - dx) / 2, (height - dy) / 2)
        return Outline(centre, half, 0.35 * min(half))

    @cached_property
    def mosaic(self) -> Mosaic:
        """Where the fibres run."""
        random, outline = self._random[0], self.outline
        area = 4 * outline.half_width[0] * outline.half_width[1]
        mean_area = sum(kind.share * np.pi / 4 * kind.diameter_um**2 for kind in FIBRE_KINDS)
        count = max(7, round(0.93 * area / (mean_area * MICRON**2)))
        centres = relaxed_centres(outline, count, random)
        radii = np.array([kind.diameter_um for kind in FIBRE_KINDS])[self.kinds_of(centres)] / 2
        weights = 0.8 * (radii * MICRON) ** 2
        corners = mosaic_junctions(outline, centres, weights)
        vessels = random.permutation(corners)[: max(2, round(0.45 * count))]
        heights = self.grid.heights
        turn = random.uniform(0, 2 * np.pi)
        lean = np.tan(np.radians(5)) * np.array([np.cos(turn), np.sin(turn)])
        return Mosaic(
            outline=outline,
            middle=float(heights.mean()),
            centres=centres,
            lean=lean + random.normal(0, np.tan(np.radians(1.5)), (count, 2)),
            weights=weights,
            junctions=vessels,
            warp=Warp.random(random),
            seam=1.4 * MICRON,
            rounding=1.8 * MICRON,
            vessel_radius=2.6 * MICRON,
        )

    def kinds_of(self, centres: FloatArray) -> NDArray[np.integer]:
        """Kind of each fibre, (F,): the best mixed of 200 shuffles (fewest like neighbours)."""
        random = np.random.default_rng([self.seed, len(centres)])
        shares = np.cumsum([kind.share for kind in FIBRE_KINDS])
        kinds = np.searchsorted(shares, (np.arange(len(centres)) + 0.5) / len(centres))
        pairs = neighbour_pairs(centres)
        shuffles = [random.permutation(kinds) for _ in range(200)]
        alike = [int((kinds[pairs[:, 0]] == kinds[pairs[:, 1]]).sum()) for kinds in shuffles]
        return np.asarray(shuffles[int(np.argmin(alike))])

    @cached_property
    def kinds(self) -> NDArray[np.integer]:
        """Kind of each fibre of the mosaic, (F,), an index into FIBRE_KINDS."""
        return self.kinds_of(self.mosaic.centres)

    @cached_property
    def cytosol(self) -> FloatArray:
        """Cytosol of each fibre, (F, species), mM."""
        table = np.array([kind.cytosol for kind in FIBRE_KINDS])[self.kinds]
        spread = np.array([kind.spread for kind in FIBRE_KINDS])[self.kinds]
        factors = np.exp(spread[:, None] * self._random[1].normal(size=(len(self.kinds), 2)))
        table[:, 1:3] *= factors
        return np.asarray(table)

    @cached_property
    def droplets(self) -> Droplets:
        """The lipid droplets: clusters beneath the membranes, and lone ones."""
        random = self._random[2]
        clusters = self._scattered([kind.clusters for kind in FIBRE_KINDS], 2.2 * MICRON)
        sizes = random.poisson(7, len(clusters))
        offsets = random.normal(0, 1, (sizes.sum(), 3)) * np.array([1.8, 1.8, 3.5]) * MICRON
        singles = self._scattered([kind.singles for kind in FIBRE_KINDS], np.inf)
        centres = np.concatenate([np.repeat(clusters, sizes, axis=0) + offsets, singles])
        diameters = np.clip(np.exp(random.normal(np.log(1.5), 0.45, len(centres))), 0.5, 4.0)
        radii = diameters * MICRON / 2
        place = self.mosaic.locate(*centres.T)
        return Droplets(centres, radii).kept(place.depth > radii + 0.1 * MICRON).apart()

    def _scattered(self, density: list[float], reach: float) -> FloatArray:
        """Random points in fibres, `density` per kind in 1000 µm³, thinned over depth/reach."""
        random, outline, grid = self._random[3], self.outline, self.grid
        height = grid.shape[0] * grid.voxel[0] + 12 * MICRON
        reach_xy = np.array(outline.half_width) + 6 * MICRON
        volume = 4 * reach_xy.prod() * height
        most = max(density)
        count = random.poisson(most * volume / (1000 * MICRON**3))
        low = np.array([*(np.array(outline.centre) - reach_xy), grid.base_height - 6 * MICRON])
        points = low + random.uniform(0, 1, (count, 3)) * np.array([*(2 * reach_xy), height])
        place = self.mosaic.locate(*points.T)
        chance = np.array(density)[self.kinds[place.fibre]] / most * np.exp(-place.depth / reach)
        return np.asarray(points[(place.depth > 0) & (random.uniform(size=count) < chance)])

    def specimen(self, refinement: tuple[int, int, int] = (2, 3, 3)) -> Specimen:
        """The section as concentration maps on `grid` refined by (rz, ry, rx).

        Each sub-voxel holds the share-weighted mean of what lies in it: membranes cross it as a
        straight edge, droplets by their volume. Sub-voxels outside the section are empty.
        """
        heights, y, x = self.grid.sub_positions(refinement)
        plane_y, plane_x = np.meshgrid(y, x, indexing="ij")
        near = self.outline.depth(plane_x, plane_y) > -12 * MICRON
        blur = 0.5 * (y[1] - y[0] + x[1] - x[0])
        maps = np.zeros((len(SPECIES), len(heights), len(y), len(x)), np.float32)
        for level, z in enumerate(heights):
            place = self.mosaic.locate(plane_x[near], plane_y[near], np.full(near.sum(), z))
            maps[:, level, near] = self._mixture(place, blur)
        droplet = self.droplets.volume_fraction(self.grid, refinement)
        maps *= 1 - droplet
        maps[LIPID] += np.float32(DROPLET_MM) * droplet
        return Specimen(
            grid=self.grid, species=SPECIES, maps=maps, refinement=refinement, notes=NOTES
        )

    def _mixture(self, place: Location, blur: float) -> Float32Array:
        """Concentrations without droplets, (species, N), mM; edges are ramps `blur` wide."""
        section = coverage(place.inside, blur)
        fibres = np.minimum(coverage(place.depth, blur), section)
        plasma = np.minimum(coverage(place.vessel, blur), section - fibres)
        seams = section - fibres - plasma
        contents = self.cytosol[place.fibre].T.copy()
        lost = np.exp(-np.maximum(place.depth, 0) / (6 * MICRON))
        contents[2] *= 1 - 0.2 * lost
        outside = np.outer(EXTRACELLULAR_MM, seams) + np.outer(PLASMA_MM, plasma)
        return (fibres * contents + outside).astype(np.float32)


def coverage(distance: FloatArray, blur: float) -> FloatArray:
    """Share of a cell of width `blur` that lies inside a straight edge `distance` away."""
    return np.asarray(np.clip(0.5 + distance / blur, 0, 1))
