"""Error with the weight that chooses itself, against the best weight found with the truth in hand.

    python bench/weights.py --json

Invented muscle and a real micrograph in species mode, total variation and non-negativity, three
noise levels, three shot counts. The error is the r.m.s. over species of ‖x − truth‖/‖truth‖.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
from collections.abc import Iterator
from dataclasses import dataclass
from hashlib import sha256

import numpy as np
from common import emit, table
from solver_cases import RECORDS, micrograph_specimen, muscle_specimen, view_of

from recon.basis import species_basis
from recon.forward import BlockQuadratic, ForwardModel, accumulate
from recon.planning.tables import VariableDensity
from recon.priors import Frame, NonNegative, Prior, TotalVariation
from recon.record import Record
from recon.simulate import NoNoise, SimulationOptions, simulate
from recon.solvers.penalised import Penalised
from recon.solvers.weight import Discrepancy, Fixed, SteinRisk
from recon.specimen import Specimen

SHOTS = (48, 96, 192)
NOISES = (0.5, 1.0, 2.0)
TIMES = np.arange(8) * 16e-3
PRIORS: tuple[Prior, ...] = (TotalVariation(), NonNegative())


@dataclass(frozen=True, eq=False)
class Scene:
    """A data term of one noise level and shot count, its units and the truth."""

    name: str
    noise: float
    shots: int
    quadratic: BlockQuadratic
    unit: np.ndarray
    truth: np.ndarray

    @property
    def frame(self) -> Frame:
        return Frame(self.quadratic.shape, self.quadratic.statistics.grid.voxel, self.unit)

    def error(self, x: np.ndarray) -> float:
        """x scaled to unit sensitivity."""
        off = x * self.unit[:, None, None, None] - self.truth
        axes = (1, 2, 3)
        return float(np.sqrt(((off**2).sum(axes) / (self.truth**2).sum(axes)).mean()))


def clean(name: str, specimen: Specimen, shots: int = max(SHOTS)) -> Record:
    """The record without noise, simulated once."""
    protocol = VariableDensity(shots=shots).protocol(specimen.grid, TIMES)
    apparatus = view_of(specimen.grid)
    digest = sha256(specimen.description_json().encode() + protocol.digest().encode())
    digest.update(np.ascontiguousarray(specimen.concentrations).tobytes())
    path = RECORDS / f"clean-{name}-{digest.hexdigest()[:12]}.h5"
    if not path.exists():
        RECORDS.mkdir(exist_ok=True)
        options = SimulationOptions(photon_noise=NoNoise())
        simulate(specimen, apparatus, protocol, options=options, path=path)
    return Record.open(path)


def scene_of(
    name: str, specimen: Specimen, record: Record, shots: int, noise: float, seed: int = 0
) -> Scene:
    """The first shots of a clean record with Gaussian noise of `noise` times the stated."""
    samples = np.concatenate([one.copy() for _, one in record.shots()])[:shots]
    rng = np.random.default_rng(seed)
    white = rng.standard_normal((*samples.shape, 2), np.float32).view(np.complex64)[..., 0]
    basis = species_basis(specimen.species, record.instrument, record.protocol)
    table_ = record.protocol.subset(np.arange(shots))
    sd = record.noise_sd * noise
    model = ForwardModel.build(specimen.grid, record.instrument, table_, basis, sd)
    statistics = accumulate(model, [(slice(0, shots), samples + np.float32(sd * 0.5**0.5) * white)])
    unit = 1 / statistics.sensitivity()
    quadratic = BlockQuadratic(statistics.scaled(unit), real=True)
    return Scene(name, noise, shots, quadratic, unit, specimen.concentrations)


def scenes(names: tuple[str, ...], seed: int = 0) -> Iterator[Scene]:
    """All noise levels and shot counts."""
    makers = {"muscle": muscle_specimen, "micrograph": micrograph_specimen}
    for name in names:
        specimen = makers[name]()
        record = clean(name, specimen)
        for shots in SHOTS:
            for noise in NOISES:
                yield scene_of(name, specimen, record, shots, noise, seed)


def best_by_search(scene: Scene, priors: tuple[Prior, ...]) -> tuple[float, float]:
    """Least error over weights in steps of √2, and where."""
    found: dict[int, float] = {}

    def error(place: int) -> float:
        if place not in found:
            rule = Fixed(2 ** (place / 2))
            settings = Penalised(priors, weight=rule, replicas=None)
            found[place] = scene.error(settings.estimate(scene.quadratic, scene.frame).x)
        return found[place]

    place = 0
    while True:
        around = min((place - 1, place, place + 1), key=error)
        if around == place:
            return error(place), 2 ** (place / 2)
        place = around


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="accepted for uniformity")
    parser.add_argument("--specimen", choices=("muscle", "micrograph"), action="append")
    parser.add_argument("--seed", type=int, default=0, help="of the noise")
    given = parser.parse_args()
    rules = {"stein": SteinRisk(), "discrepancy": Discrepancy()}
    rows, excess = [], {name: [] for name in rules}
    for scene in scenes(tuple(given.specimen or ("muscle", "micrograph")), given.seed):
        best, where = best_by_search(scene, PRIORS)
        row = [scene.name, scene.shots, scene.noise, f"{best:.4f}", f"{where:.2f}"]
        for name, rule in rules.items():
            found = Penalised(PRIORS, weight=rule, replicas=None).estimate(
                scene.quadratic, scene.frame
            )
            ratio = scene.error(found.x) / best
            excess[name].append(ratio)
            weight = next(iter(found.weights.values()))
            row += [f"{weight:.2f}", f"{ratio:.3f}"]
        rows.append(row)
        print(*row, flush=True)
    header = ["specimen", "shots", "noise", "best error", "at λ"]
    for name in rules:
        header += [f"{name}: λ", "error / best"]
    table(rows, header)
    emit({f"worst_over_best_{name}": max(values) for name, values in excess.items()})


if __name__ == "__main__":
    main()
