"""The demonstration: an invented muscle section from description to files and figures.

Everything in it is invented: a lean exercised muscle, hyperpolarised, above a camera-read layer
with its sensing axis along the bias field. Each step is what one verb of the command line does.
"""

from __future__ import annotations

import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from recon import figures
from recon.basis import species_basis
from recon.demo_overlap import Overlap
from recon.handover.dataset import Delivery
from recon.instrument import Instrument
from recon.planning.tables import VariableDensity, lateral_factor
from recon.protocol import Protocol, SpectralAxis
from recon.reconstruct import reconstruct
from recon.record import Record
from recon.report import Content, write_page
from recon.result import Cube, SpeciesMaps
from recon.simulate import simulate
from recon.solvers.estimate import Progress, silent
from recon.solvers.ridge import Ridge
from recon.specimen import Specimen
from recon.specimens.muscle import Muscle
from recon.unknown import ComplexCube

FloatArray = NDArray[np.floating]

SHOTS = 80
SAMPLES = 32
INTERVAL = 8e-3


def instrument() -> Instrument:
    """A camera-read layer 2 µm thick under a 256 µm view; invented."""
    return Instrument.model_validate(
        {
            "temperature_C": 25.0,
            "bias_field_mT": (0.0, 0.0, 250.0),
            "sensor_layer": {"depth_um": 0.1, "thickness_um": 2.0, "crystal_cut": "111"},
            "optics": {"numerical_aperture": 0.5, "wavelength_nm": 700.0},
            "camera": {"pixel_um": 4.0, "field_of_view_um": (256.0, 256.0)},
            "gradients": {
                "nuclear_strength_mT_per_m": 1000.0,
                "nuclear_pulse_max_ms": 4.0,
                "sensor_strength_mT_per_m": 1000.0,
                "sensor_pulse_max_us": 50.0,
            },
            "readout": {
                "photons_per_readout": 1e6,
                "contrast": 0.03,
                "sensing_time_us": 20.0,
                "efficiency": 0.6,
                "readouts_per_sample": 50,
            },
        }
    )


def protocol(specimen: Specimen, seed: int = 0) -> Protocol:
    """Variable-density random encoding, 1/51 of a full raster."""
    return VariableDensity(shots=SHOTS, seed=seed).protocol(
        specimen.grid,
        np.arange(SAMPLES) * INTERVAL,
        spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE,
    )


@dataclass(frozen=True)
class Step:
    """One step of the demonstration that is done: what it was and what it wrote."""

    what: str
    files: tuple[Path, ...]
    seconds: float


@dataclass(frozen=True)
class Demo:
    """The demonstration in a folder.

    Attributes
    ----------
    folder
        Where it writes; made if it is not there.
    seed
        Of specimen, table and noise.
    progress
        Called with what is being done.
    """

    folder: Path
    seed: int = 0
    progress: Progress = silent

    def run(self) -> Iterator[Step | str]:
        """Yield every step when it is done, and the figures of merit as text."""
        begin = time.perf_counter()

        def done(what: str, *files: Path) -> Step:
            nonlocal begin
            seconds, begin = time.perf_counter() - begin, time.perf_counter()
            return Step(what, files, seconds)

        specimen, apparatus, table = self.describe()
        yield done("described instrument and specimen, drew the table of shots", *self._described())
        record = self.measure(specimen, apparatus, table)
        yield done(f"simulated {len(record)} shots", self.folder / "record.h5")
        yield (
            f"undersampling: {lateral_factor(table, specimen.grid):.0f} times fewer shots than "
            "full phase encoding"
        )
        ridge = self._reconstruct(record, "ridge.h5", Ridge())
        maps = self._reconstruct(record, "maps.h5", None)
        yield done("reconstructed species maps", self.folder / "ridge.h5", self.folder / "maps.h5")
        yield from self.errors(specimen, maps, ridge)
        cube = reconstruct(record, ComplexCube(), progress=self.progress)
        assert isinstance(cube, Cube)
        cube.save(self.folder / "cube.h5")
        yield done("reconstructed the complex cube", self.folder / "cube.h5")
        yield done("drew figures", *self.draw(specimen, table, maps, ridge, cube))
        overlap = Overlap(self.folder, apparatus, self.seed, self.progress).run()
        yield done("told lactate from lipid at one place in the spectrum", *overlap.files)
        yield from overlap.lines
        files = self.hand_over(maps, cube)
        page = self.report(specimen, apparatus, table, maps, cube)
        yield done(f"handed over {len(files)} files and a page", page)
        yield f"open the page      {page}"
        yield f"open the dataset   {self.folder / 'dataset'}"

    def describe(self) -> tuple[Specimen, Instrument, Protocol]:
        """Write and return the descriptions and the table of shots."""
        self.progress("drawing the specimen", None)
        specimen, apparatus = Muscle.small(self.seed).specimen(), instrument()
        table = protocol(specimen, self.seed)
        table.check_reach(apparatus)
        apparatus.to_toml(self.folder / "instrument.toml")
        specimen.save(self.folder / "specimen.toml")
        table.save(self.folder / "protocol.h5")
        return specimen, apparatus, table

    def measure(self, specimen: Specimen, apparatus: Instrument, table: Protocol) -> Record:
        """Simulate the record."""
        return simulate(
            specimen,
            apparatus,
            table,
            seed=self.seed,
            progress=lambda done, of: self.progress("simulating shots", done / of),
            path=self.folder / "record.h5",
        )

    def errors(self, specimen: Specimen, maps: SpeciesMaps, ridge: SpeciesMaps) -> Iterator[str]:
        """Predicted and achieved relative errors per species."""
        yield "relative error (r.m.s. over r.m.s. amount): predicted, achieved, and of ridge"
        for place, name in enumerate(maps.names):
            truth = specimen.concentrations[place]
            size = np.sqrt((truth**2).mean())
            assert maps.standard_error is not None
            predicted = np.sqrt((maps.standard_error[place] ** 2).mean()) / size
            achieved, plain = (
                np.sqrt(((one.values[place] - truth) ** 2).mean()) / size for one in (maps, ridge)
            )
            figures_of_merit = (100 * float(part) for part in (predicted, achieved, plain))
            yield f"  {name:<10}" + "".join(f"{part:6.0f} %" for part in figures_of_merit)

    def hand_over(self, maps: SpeciesMaps, cube: Cube) -> list[Path]:
        """The dataset for an imaging group."""
        written = Delivery(maps, cube, name="invented muscle section").write(
            self.folder / "dataset", replace=True
        )
        return [self.folder / "dataset" / path for path in written]

    def report(
        self,
        specimen: Specimen,
        apparatus: Instrument,
        table: Protocol,
        maps: SpeciesMaps,
        cube: Cube,
    ) -> Path:
        """The page for a person."""
        content = Content(
            maps,
            cube,
            specimen.species,
            apparatus,
            table,
            specimen.concentrations,
            title="Exercised muscle on a sensor (invented)",
            notes=specimen.notes,
        )
        return write_page(self.folder / "report.html", content)

    def draw(
        self,
        specimen: Specimen,
        table: Protocol,
        maps: SpeciesMaps,
        ridge: SpeciesMaps,
        cube: Cube,
    ) -> list[Path]:
        """Truth, ridge and sparse maps with errors; one voxel's spectrum; the table of shots."""
        self.progress("drawing figures", None)
        folder, written = self.folder / "figures", []
        for place, name in enumerate(maps.names):
            columns: Mapping[str, FloatArray] = {
                "ridge": ridge.values[place],
                "sparse": maps.values[place],
            }
            picture = figures.comparison(
                columns,
                maps.grid,
                quantity=name,
                unit="mM",
                truth=specimen.concentrations[place],
                depths=(0, 2, 5),
            )
            written.append(figures.save(picture, folder / f"{name}.png"))
            if maps.standard_error is not None:
                stack = figures.depth_stack(
                    maps.values[place],
                    maps.standard_error[place],
                    maps.grid,
                    quantity=name,
                    unit="mM",
                )
                written.append(figures.save(stack, folder / f"{name}-planes.png"))
        written.append(figures.save(self._spectrum(specimen, cube), folder / "spectrum.png"))
        shots = figures.coverage(
            table.nuclear_wavevector,
            table.sensor_wavevector,
            table.sensing_axis,
            maps.grid,
            table.averages,
        )
        written.append(figures.save(shots, folder / "shots.png"))
        return written

    def _spectrum(self, specimen: Specimen, cube: Cube) -> Figure:
        """Spectrum of the voxel richest in lactate in the lowest plane, against the truth."""
        plane = specimen.concentrations[specimen.index("lactate"), 0]
        y, x = np.unravel_index(int(plane.argmax()), plane.shape)
        voxel = (0, int(y), int(x))
        ppm, spectrum = cube.spectrum()
        courses = species_basis(specimen.species, instrument(), protocol(specimen))
        amounts = specimen.concentrations[(slice(None), *voxel)]
        true = replace(
            cube,
            values=np.broadcast_to((courses @ amounts)[:, None, None, None], cube.values.shape),
        )
        assert cube.standard_error is not None
        error = cube.dwell * np.sqrt((cube.standard_error[:, 0, y, x] ** 2).sum() / 2)
        return figures.spectrum(
            ppm,
            {"reconstructed": spectrum[(slice(None), *voxel)].real * 1e3},
            unit="mA/m s",
            truth=true.spectrum()[1][(slice(None), *voxel)].real * 1e3,
            errors={"reconstructed": np.asarray(error * 1e3)},
            lines={one.name: one.shift_ppm for one in specimen.species},
            grid=cube.grid,
            voxel=voxel,
        )

    def _reconstruct(self, record: Record, name: str, estimator: Ridge | None) -> SpeciesMaps:
        maps = reconstruct(record, None, estimator, progress=self.progress)
        assert isinstance(maps, SpeciesMaps)
        maps.save(self.folder / name)
        return maps

    def _described(self) -> tuple[Path, ...]:
        names = ("instrument.toml", "specimen.toml", "specimen.h5", "protocol.h5")
        return tuple(self.folder / name for name in names)
