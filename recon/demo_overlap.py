"""Lactate under lipid: two lines at one place, told apart by a doublet. Everything is invented.

At 0.1 T the methyl line of lactate and the CH2 line of stored fat lie 0.06 Hz apart. The methyl is
a doublet 7 Hz wide, its neighbour a single line; sampled for longer than 1/J the two courses part.
A corner of the invented muscle serves, with its fat seen by CH2 instead of CH3.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from recon import figures
from recon.basis import species_basis
from recon.instrument import Instrument
from recon.planning.tables import VariableDensity
from recon.priors import NonNegative, TotalVariation
from recon.protocol import SpectralAxis
from recon.quantify import Fit, Nuisance, compare, labels, patterns_of
from recon.quantify.drawing import voxel_figure
from recon.reconstruct import reconstruct
from recon.record import Record
from recon.result import Cube, SpeciesMaps
from recon.separability import Separability
from recon.simulate import simulate
from recon.solvers.estimate import Progress, silent
from recon.solvers.penalised import Penalised
from recon.solvers.replicas import Replicas
from recon.specimen import Species, Specimen
from recon.specimens.muscle import SPECIES, Muscle, MuscleSize
from recon.unknown import ComplexCube

FIELD_MT = 100.0
SIZE = MuscleSize((2, 32, 32))
SHOTS = 120
SAMPLES, INTERVAL = 32, 10e-3
REPLICAS = 12

CH2_PROTONS = 60
"""CH2 protons of a triglyceride at 1.30 ppm, rounded (from memory)."""

NAMES = ("water", "creatine", "lactate", "lipid CH2")


@dataclass(frozen=True)
class Outcome:
    """What was written, and what is to be said."""

    files: tuple[Path, ...]
    lines: tuple[str, ...]


def species() -> tuple[Species, ...]:
    """The muscle's, lactate by its spin system and fat by its CH2."""
    water, creatine, lactate, lipid = SPECIES
    doublet = {"spin_system": "lactate", "equivalent_nuclei": 4}
    methylene = {"name": "lipid CH2", "shift_ppm": 1.30, "equivalent_nuclei": CH2_PROTONS}
    return (
        water,
        creatine,
        lactate.model_copy(update=doublet),
        lipid.model_copy(update=methylene),
    )


def section(seed: int = 0) -> Specimen:
    """A section 128 µm wide, two planes of 4 µm, its fat in CH2."""
    drawn = Muscle(SIZE, seed).specimen((1, 2, 2))
    return Specimen(drawn.grid, species(), drawn.maps, drawn.refinement, drawn.notes)


@dataclass(frozen=True)
class Overlap:
    """The demonstration of two lines at one place.

    Attributes
    ----------
    folder
        Where files and figures go.
    apparatus
        The instrument of the main demonstration; its field and view are changed.
    seed
        Of specimen, table and noise.
    progress
        Called with what is being done.
    """

    folder: Path
    apparatus: Instrument
    seed: int = 0
    progress: Progress = silent

    def run(self) -> Outcome:
        """Simulate, reconstruct both ways, fit, draw."""
        specimen = section(self.seed)
        record = self.measure(specimen)
        errors = Replicas(REPLICAS)
        direct = Penalised((TotalVariation(), NonNegative()), replicas=errors)
        joint = Penalised((TotalVariation(joint=True),), replicas=errors)
        maps = reconstruct(record, None, direct, progress=self.progress)
        cube = reconstruct(record, ComplexCube(), joint, progress=self.progress)
        assert isinstance(maps, SpeciesMaps)
        assert isinstance(cube, Cube)
        patterns = patterns_of(specimen.species, record.instrument, cube)
        fitted = Fit(Nuisance(0.0), Nuisance(0.0)).fit(cube, patterns)
        agreement = compare(maps, fitted, cube, patterns)
        maps.save(self.folder / "overlap-maps.h5")
        cube.save(self.folder / "overlap-cube.h5")
        drawn = self.draw(specimen, maps)
        for name in ("lactate", "lipid CH2"):
            voxel = richest(specimen, name)
            picture = voxel_figure(cube, fitted, patterns, voxel, limits_ppm=(-5.0, 11.0))
            path = self.folder / "figures" / f"overlap-{name.replace(' ', '-')}-voxel.png"
            drawn.append(figures.save(picture, path))
        picture = figures.label_maps(labels(fitted), fitted.names, cube.grid)
        drawn.append(figures.save(picture, self.folder / "figures" / "overlap-labels.png"))
        told = (*self.conditions(record), *self.errors(specimen, maps), *agreement.remarks())
        kept = (self.folder / "overlap-maps.h5", self.folder / "overlap-cube.h5")
        return Outcome((*kept, *drawn), told)

    def measure(self, specimen: Specimen) -> Record:
        """Simulate the record at the lower field."""
        _, ny, nx = specimen.grid.shape
        side = ny * specimen.grid.voxel[1] * 1e6, nx * specimen.grid.voxel[2] * 1e6
        facts = self.apparatus.model_dump(exclude_none=True)
        facts["bias_field_mT"] = (0.0, 0.0, FIELD_MT)
        facts["camera"] = {"pixel_um": 4.0, "field_of_view_um": side}
        instrument = Instrument.model_validate(facts)
        table = VariableDensity(shots=SHOTS, seed=self.seed).protocol(
            specimen.grid,
            np.arange(SAMPLES) * INTERVAL,
            spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE,
        )
        return simulate(
            specimen,
            instrument,
            table,
            seed=self.seed,
            progress=lambda done, of: self.progress("simulating shots", done / of),
        )

    def conditions(self, record: Record) -> tuple[str, ...]:
        """How alike the two are with the doublet, and if lactate were a single line."""
        found = []
        for kinds in (species()[2:], (SPECIES[2], species()[3])):
            basis = species_basis(kinds, record.instrument, record.protocol)
            found.append(Separability.of_basis([one.name for one in kinds], basis).condition)
        apart = (1.3142 - 1.30) * 1e-6 * record.instrument.larmor_frequency
        return (
            f"lactate under lipid CH2 at {FIELD_MT:g} mT, {apart:.2f} Hz apart: condition "
            f"{found[0]:.2g} by the doublet, {found[1]:.2g} were lactate a single line",
        )

    def errors(self, specimen: Specimen, maps: SpeciesMaps) -> tuple[str, ...]:
        """Achieved against stated errors of the two."""
        lines = []
        assert maps.standard_error is not None
        for name in ("lactate", "lipid CH2"):
            place = maps.names.index(name)
            off = maps.values[place] - specimen.concentrations[place]
            spread = maps.standard_error[place]
            size = np.sqrt((specimen.concentrations[place] ** 2).mean())
            inside = float((np.abs(off) < 2 * spread).mean())
            shares = (float(np.sqrt((part**2).mean()) / size) for part in (spread, off))
            stated, found = (f"{100 * share:.0f} %" for share in shares)
            lines.append(
                f"  {name}: error stated {stated}, achieved {found}; "
                f"{100 * inside:.0f} % of voxels within 2 standard errors"
            )
        return tuple(lines)

    def draw(self, specimen: Specimen, maps: SpeciesMaps) -> list[Path]:
        """Lactate: truth, map and error; map with its standard error beside it."""
        place, folder = maps.names.index("lactate"), self.folder / "figures"
        assert maps.standard_error is not None
        picture = figures.comparison(
            {"under lipid": maps.values[place]},
            maps.grid,
            quantity="lactate",
            unit="mM",
            truth=specimen.concentrations[place],
            depths=(0, 1),
        )
        stack = figures.depth_stack(
            maps.values[place], maps.standard_error[place], maps.grid, quantity="lactate", unit="mM"
        )
        return [
            figures.save(picture, folder / "overlap-lactate.png"),
            figures.save(stack, folder / "overlap-lactate-planes.png"),
        ]


def richest(specimen: Specimen, name: str) -> tuple[int, int, int]:
    """The voxel of the lowest plane with most of a species."""
    plane = specimen.concentrations[specimen.index(name), 0]
    y, x = np.unravel_index(int(plane.argmax()), plane.shape)
    return 0, int(y), int(x)
