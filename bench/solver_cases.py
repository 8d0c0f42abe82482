"""The problems that solvers are compared on: wavelet ℓ1 on a complex image of magnetisation.

Records are simulated by `recon.simulate` and kept in `bench/.records`; the muscle is invented, the
micrograph is one that scikit-image ships in its wheel. Only one sample time, so that the unknown
has one component.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from hashlib import sha256
from importlib.resources import files

import numpy as np
from common import ROOT
from scene import MICRON

from recon.basis import species_basis
from recon.demo import instrument
from recon.forward import BlockQuadratic, ForwardModel, accumulate
from recon.forward.channels import Channels
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.general_statistics import gather
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.tables import SensorRing, VariableDensity
from recon.priors import Frame, WaveletSparsity
from recon.protocol import Protocol
from recon.record import Record
from recon.simulate import simulate
from recon.solvers import Problem, Weighted
from recon.solvers.general import GeneralQuadratic, MajorisedStep
from recon.specimen import Species, Specimen
from recon.specimens.from_image import specimen_from_image
from recon.specimens.level_table import GreyLevels, LevelTable
from recon.specimens.muscle import LARGE, SMALL, Muscle, MuscleSize

SPECIES = tuple(
    Species(
        name=name,
        shift_ppm=shift,
        equivalent_nuclei=3,
        t2_star_ms=120.0,
        t1_s=1.0,
        diffusion_um2_per_ms=0.2,
        polarisation=0.01,
    )
    for name, shift in (("lactate", 1.33), ("creatine", 3.03))
)
PRIOR = WaveletSparsity("db4", 4)
AVERAGES = 4
RECORDS = ROOT / "bench" / ".records"


def micrograph_specimen(planes: int = 3) -> Specimen:
    """A cell's phase image as concentrations, 64 × 64 voxels of 4 µm; amounts are assumed."""
    grid = Grid((planes, 64, 64), (4 * MICRON,) * 3)
    levels = GreyLevels(np.array([60.0, 180.0]), np.array([[0.0, 30.0], [40.0, 0.0]]))
    image = str(files("skimage.data") / "cell.png")
    table = LevelTable(SPECIES, levels)
    return specimen_from_image(image, table, grid, pixel_um=0.42, refinement=(1, 2, 2))


def muscle_specimen(size: MuscleSize = SMALL) -> Specimen:
    """The demonstration's invented muscle."""
    return Muscle(size).specimen((1, 2, 2))


def view_of(grid: Grid, one_detector: bool = False) -> Instrument:
    """The demonstration's instrument with a view as wide as the grid."""
    described = instrument().model_dump(exclude_none=True)
    view = tuple(n * d / MICRON for n, d in zip(grid.shape[:0:-1], grid.voxel[:0:-1], strict=True))
    camera = described.pop("camera")
    if one_detector:
        described["one_detector"] = {"field_of_view_um": view}
        described["readout"]["photons_per_readout"] *= 4096  # the light of all pixels
    else:
        described["camera"] = camera | {"field_of_view_um": view}
    return Instrument.model_validate(described)


@dataclass(frozen=True, eq=False)
class Case:
    """A record in memory, what it was made from, and its weight of the prior.

    Attributes
    ----------
    weight
        λ in units of the noise of a unit-sensitivity unknown.
    dead
        Dead pixels, or None.
    """

    name: str
    record: Record
    truth: np.ndarray
    weight: float = 1.0
    dead: np.ndarray | None = None

    @property
    def model(self) -> ForwardModel:
        record, basis = self.record, np.ones((1, 1), complex)
        grid, protocol = record.specimen.grid, record.protocol
        return ForwardModel.build(grid, record.instrument, protocol, basis, record.noise_sd)

    @property
    def samples(self) -> np.ndarray:
        return np.concatenate([one.copy() for _, one in self.record.shots()])

    @property
    def unit(self) -> np.ndarray:
        """Size of one unit of the unknown, A/m."""
        statistics = accumulate(self.model, [(slice(0, len(self.record)), self.samples)])
        return 1 / statistics.sensitivity()

    def frame(self, unit: np.ndarray) -> Frame:
        grid = self.record.specimen.grid
        return Frame((1, *grid.shape), grid.voxel, unit)

    def problem(self, samples: np.ndarray) -> Problem:
        """Everything from the record in memory to the problem: b, blocks, units."""
        model = self.model
        batches = [(slice(0, len(samples)), samples)]
        if self.dead is not None:
            return self._general(model, batches)
        statistics = accumulate(model, batches)
        unit = 1 / statistics.sensitivity()
        quadratic = BlockQuadratic(statistics.scaled(unit))
        return Problem(quadratic, (Weighted(PRIOR.on(self.frame(unit)), self.weight),))

    def _general(self, model: ForwardModel, batches: list) -> Problem:
        record = self.record
        channels = Channels.ideal(model.channels).without(self.dead)
        general = GeneralModel.build(
            model.grid,
            model.instrument,
            record.protocol,
            model.basis,
            record.noise_sd,
            channels=channels,
        )
        operator = GeneralOperator(general, np.complex64)
        quadratic = GeneralQuadratic(operator, gather(operator, batches), rule=MajorisedStep())
        unit = 1 / np.sqrt(quadratic.diagonal().mean(axis=1))
        scaled = quadratic.scaled(unit)
        return Problem(scaled, (Weighted(PRIOR.on(self.frame(unit)), self.weight),))


def measured(
    name: str, specimen: Specimen, protocol: Protocol, apparatus: Instrument, weight: float
) -> Case:
    """Simulate the record, once."""
    digest = sha256((specimen.description_json() + apparatus.model_dump_json()).encode())
    digest.update(specimen.maps.tobytes() + protocol.digest().encode())
    path = RECORDS / f"{name}-{digest.hexdigest()[:12]}.h5"
    if not path.exists():
        RECORDS.mkdir(exist_ok=True)
        simulate(specimen, apparatus, protocol, seed=1, path=path)
    record = Record.open(path)
    courses = species_basis(specimen.species, apparatus, protocol)
    truth = np.tensordot(courses, specimen.concentrations, 1).astype(np.complex64)
    return Case(name, record, truth, weight)


def camera_case(name: str, specimen: Specimen, shots: int = 338, weight: float = 2.0) -> Case:
    protocol = VariableDensity(shots=shots).protocol(specimen.grid, np.zeros(1))
    return measured(name, specimen, protocol, view_of(specimen.grid), weight)


def one_detector_case(weight: float = 2.0) -> Case:
    """Sensor and nuclear gradients together, 4096 values for two planes of 64 × 64.

    Two rings of sensor wavenumbers tell the planes apart; more planes from so few values leave
    the wavelet problem without a definite solution.
    """
    specimen = Muscle(MuscleSize((2, 64, 64))).specimen((1, 1, 1))
    table = VariableDensity(shots=4096, sensor=SensorRing((0.05, 0.2)), width=0.4)
    protocol = table.protocol(specimen.grid, np.zeros(1), averages=AVERAGES)
    return measured("onedetector64", specimen, protocol, view_of(specimen.grid, True), weight)


def dead_pixels_case() -> Case:
    """6 % of the pixels dead, in clusters."""
    whole = camera_case("deadpixels64", muscle_specimen())
    rng = np.random.default_rng(5)
    dead = np.zeros((64, 64), bool)
    while dead.mean() < 0.06:
        y, x = rng.integers(0, 61, 2)
        dead[y : y + 4, x : x + 4] |= rng.random((4, 4)) < 0.8
    return replace(whole, dead=dead)


CASES: dict[str, Callable[[], Case]] = {
    "muscle64": lambda: camera_case("muscle64", muscle_specimen()),
    "muscle128": lambda: camera_case("muscle128", muscle_specimen(LARGE)),
    "micrograph64": lambda: camera_case("micrograph64", micrograph_specimen()),
    "onedetector64": one_detector_case,
    "deadpixels64": dead_pixels_case,
}
