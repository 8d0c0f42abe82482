"""What choosing the shots is worth, and what it costs.

    python bench/planning.py --json

Muscle section 64 × 64 × 6, three hyperpolarised metabolites, camera; and a small scene with one
detector. Shots that the chosen plan needs for the mean error of random ones over the same range
of wavevectors: variable density of the usual width (0.4 of Nyquist), variable density whose width
and axial range are themselves tuned by the bound, and uniform. Twice: when nothing is expected of
the planes, and when fibres along z are (planes alike over 200 µm). The bound against Monte-Carlo;
reconstruction error at equal time; seconds to choose 256 shots from over 100 000 candidates; the
greedy table against the best of all on a small problem, and against the relaxed lower bound on
the large one.
"""

from __future__ import annotations

import itertools
import time
from dataclasses import dataclass, field, replace

import joint_encoding
import numpy as np
from common import emit, table

from recon.demo import INTERVAL, SAMPLES, instrument
from recon.forward import ForwardOperator, accumulate
from recon.forward.block_matrix import BlockMatrix
from recon.grid import Grid
from recon.planning.bound import Bound, Expectation, Experiment
from recon.planning.candidates import Candidates, camera_kinds, detector_kinds
from recon.planning.choice import Budget, Choice, information_of
from recon.planning.relaxed import lower_bound
from recon.planning.tables import (
    NoSensorGradient,
    SensorRing,
    SensorShare,
    UniformRandom,
    VariableDensity,
)
from recon.priors import NonNegative, TotalVariation
from recon.protocol import Protocol, SpectralAxis
from recon.reconstruct import reconstruct
from recon.simulate import simulate
from recon.solvers.penalised import Penalised
from recon.specimen import Specimen
from recon.specimens.muscle import Muscle

TIMES = np.arange(SAMPLES) * INTERVAL
FEATURE_UM = 20.0
AXIAL_FEATURE_UM = 200.0


def mean_error(experiment: Experiment, protocol: Protocol) -> float:
    """R.m.s. over species and depths of the bound with the prior, in units of the spread."""
    error = Bound.of(experiment, protocol).standard_error()
    return float(
        np.sqrt(((error / np.array(experiment.expectation.spread_mM)[:, None]) ** 2).mean())
    )


@dataclass(frozen=True)
class Rival:
    """A random rule with a width (None: uniform) and an axial range, for one scene."""

    width: float | None
    axial: float
    sensor: SensorShare = field(default_factory=NoSensorGradient)

    def table(self, grid: Grid, shots: int, seed: int) -> Protocol:
        common = {
            "shots": shots,
            "seed": seed,
            "axial_bound_rad_per_um": self.axial,
            "sensor": self.sensor,
        }
        made = (
            UniformRandom(**common)
            if self.width is None
            else VariableDensity(width=self.width, **common)
        )
        return made.protocol(grid, TIMES, spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE)


def tuned(experiment: Experiment, rivals: list[Rival], shots: int) -> Rival:
    """The best of several by the bound, seed 99."""
    return min(
        rivals,
        key=lambda rival: mean_error(experiment, rival.table(experiment.grid, shots, 99)),
    )


def shots_needed(experiment, candidates, pairs, goal: float) -> int:
    """Least number of the greedy table's first shots whose bound is below a goal."""
    low, high = 1, len(pairs)
    while low < high:
        middle = (low + high) // 2
        if mean_error(experiment, candidates.protocol(pairs[:middle], TIMES)) <= goal:
            high = middle
        else:
            low = middle + 1
    return low


def monte_carlo(experiment: Experiment, protocol: Protocol, replicas: int = 40) -> float:
    """Error of the best linear estimate over random objects and noisy records ÷ the bound."""
    bound = Bound.of(experiment, protocol)
    model = experiment.model(protocol)
    operator = ForwardOperator(model)
    unit = bound.unit
    inverse = BlockMatrix(
        bound._posterior.transpose(0, 2, 3, 1).astype(np.complex64), bound.quadratic.matrix.batch
    )
    root = np.sqrt(experiment.expectation.spectrum(experiment.grid))
    along = np.linalg.cholesky(experiment.expectation.axial_covariance(experiment.grid))
    rng = np.random.default_rng(0)
    sigma = np.sqrt(0.5 / model.encoding.weight)[:, None, None, None]
    total = np.zeros((len(unit), experiment.grid.shape[0]))
    for _ in range(replicas):
        white = rng.standard_normal((len(unit), *experiment.grid.shape))
        white = np.einsum("zw,swyx->szyx", along, white)
        x = np.fft.ifft2(np.fft.fft2(white) * root).real
        y = operator.apply((x * unit[:, None, None, None]).astype(np.complex64))
        noise = rng.standard_normal((*y.shape, 2)).view(complex)[..., 0]
        y = (y + sigma * noise).astype(np.complex64)
        statistics = accumulate(model, [(slice(0, len(protocol)), y)]).scaled(unit)
        quadratic = type(bound.quadratic)(statistics, real=True)
        found = quadratic.filtered(inverse, quadratic.linear)
        total += ((found - x) ** 2).mean(axis=(2, 3))
    measured = np.sqrt(total / replicas) * unit[:, None]
    return float((bound.standard_error() / measured).mean())


def exhaustive() -> float:
    """Criterion of greedy with exchange over the best of all tables of 4 out of 24."""
    grid = Grid((2, 8, 8), (4e-6,) * 3)
    apparatus = instrument().model_copy(
        update={"camera": instrument().camera.model_copy(update={"field_of_view_um": (32.0, 32.0)})}
    )
    species = Muscle.small().specimen((1, 1, 1)).species[2:3]
    experiment = Experiment(apparatus, grid, species, Expectation((10.0,), 8.0))
    candidates = Candidates.of(grid, apparatus, camera_kinds())
    keep = np.random.default_rng(0).choice(candidates.steps.shape[0], 24, replace=False)
    candidates.allowed[:] = False
    candidates.allowed[0, keep] = True
    times = TIMES[:8]
    chosen = Choice(exchanges=20, shortlist=24).choose(
        experiment, candidates, times, Budget(shots=4)
    )
    information = information_of(experiment, candidates, times)

    def value(pairs) -> float:
        information.set_table(list(pairs))
        return information.criterion()

    options = [(0, int(place)) for place in keep]
    best = min(value(pairs) for pairs in itertools.combinations_with_replacement(options, 4))
    return value(chosen.pairs) / best


def nrmse(specimen: Specimen, protocol: Protocol) -> np.ndarray:
    """Relative error of the default reconstruction of a simulated record, (species,)."""
    record = simulate(specimen, instrument(), protocol, seed=5)
    maps = reconstruct(record, None, Penalised((TotalVariation(), NonNegative()), replicas=None))
    truth = specimen.concentrations
    return np.sqrt(((maps.values - truth) ** 2).sum((1, 2, 3)) / (truth**2).sum((1, 2, 3)))


def reconstruction_gain(specimen, experiment, candidates, rivals, shots: int) -> dict[str, float]:
    """Error with the chosen table over that with each rival (two seeds), mean over species."""
    chosen = Choice().choose(experiment, candidates, TIMES, Budget(shots=shots))
    ours = nrmse(specimen, chosen.protocol)
    rows, gains = [["chosen", *ours, ""]], {}
    for name, rival in rivals.items():
        tables = [rival.table(specimen.grid, shots, seed) for seed in (0, 1)]
        theirs = np.mean([nrmse(specimen, one) for one in tables], axis=0)
        gains[name] = float(np.mean(ours / theirs))
        rows.append([name, *theirs, gains[name]])
    print(f"reconstruction error, {shots} shots")
    table(rows, ["table", *specimen.names, "chosen ÷ this"])
    return gains


def compare(experiment, candidates, pairs, rivals, shots: int) -> dict[str, float]:
    """Chosen shots needed for each rival's mean error (three seeds), over the rival's shots."""
    rows, needed = [], {}
    for name, rival in rivals.items():
        goals = [
            mean_error(experiment, rival.table(experiment.grid, shots, seed)) for seed in range(3)
        ]
        found = [shots_needed(experiment, candidates, pairs, goal) / shots for goal in goals]
        needed[name] = float(np.mean(found))
        rows.append(
            [
                f"{name}: width {rival.width}, |k_z| to {rival.axial:.3g} rad/µm",
                np.mean(goals),
                f"{np.mean(found):.3f} ± {np.std(found):.3f}",
            ]
        )
    at = mean_error(experiment, candidates.protocol(pairs[:shots], TIMES))
    rows.append(["chosen", at, "1"])
    table(rows, [f"{shots} shots", "mean error / spread", f"chosen shots needed ÷ {shots}"])
    return needed


def muscle() -> tuple[Specimen, Experiment]:
    whole = Muscle.small().specimen()
    specimen = Specimen(
        whole.grid, whole.species[1:], whole.maps[1:], whole.refinement, whole.notes
    )
    spread = tuple(float(s) for s in specimen.concentrations.std((1, 2, 3)))
    return specimen, Experiment(
        instrument(), specimen.grid, specimen.species, Expectation(spread, FEATURE_UM)
    )


def fibres(experiment: Experiment) -> Experiment:
    """The same, with planes that are alike."""
    expected = replace(experiment.expectation, axial_feature_um=AXIAL_FEATURE_UM)
    return replace(experiment, expectation=expected)


def one_detector() -> dict[str, float]:
    """No gradient along z; the sensor gradient picks the field frequency."""
    scene = joint_encoding.detector_scene()
    shots = 96
    kinds = detector_kinds(scene.grid, joint_encoding.RINGS, 8)
    candidates = Candidates.of(scene.grid, scene.instrument, kinds, joint_encoding.LIMITS)
    chosen = Choice().choose(scene, candidates, TIMES, Budget(shots=2 * shots))
    ring = SensorRing(joint_encoding.RINGS)
    print("one detector, 16 × 16 × 4 voxels, no gradient along z")
    few = [Rival(width, 0.0, ring) for width in (0.1, 0.2, 0.3, 0.4, 0.8)]
    rivals = {"usual": Rival(0.4, 0.0, ring), "tuned": tuned(scene, few, shots)}
    return compare(scene, candidates, chosen.pairs, rivals, shots)


def main() -> None:
    specimen, experiment = muscle()
    reach = np.pi / (specimen.grid.voxel[0] * 1e6)
    axial = tuple(float(wave) for wave in np.linspace(-reach, reach, 25))
    candidates = Candidates.of(specimen.grid, instrument(), camera_kinds((1,), axial))
    options = [
        Rival(w, reach * part) for w in (0.05, 0.1, 0.2, 0.4) for part in (0, 0.25, 0.5, 1, 1.3)
    ]
    needed, tables, seconds = {}, {}, {}
    for name, setting in (("independent", experiment), ("fibres", fibres(experiment))):
        begin = time.perf_counter()
        tables[name] = Choice().choose(setting, candidates, TIMES, Budget(shots=256)).pairs
        seconds[name] = time.perf_counter() - begin
        print(f"{name} planes: 256 of {candidates.count} chosen in {seconds[name]:.1f} s")
        usual = [option for option in options if option.width == 0.4]
        rivals = {
            "variable density, usual": Rival(0.4, reach),
            "usual, range tuned": tuned(setting, usual, 128),
            "width and range tuned": tuned(setting, options, 128),
            "uniform": Rival(None, reach),
        }
        needed[name] = compare(setting, candidates, tables[name], rivals, 128)
    detector = one_detector()
    pairs = tables["independent"]
    ratio = monte_carlo(experiment, candidates.protocol(pairs[:64], TIMES))
    relaxed = lower_bound(information_of(experiment, candidates, TIMES), pairs[:128], 30)
    small = exhaustive()
    print(f"greedy above the relaxed lower bound by at most {100 * relaxed.gap:.2f} % (128 shots)")
    print(f"greedy with exchange over the best of all 4-shot tables: {small:.4f}")
    few = Candidates.of(specimen.grid, instrument(), camera_kinds((1,), axial[::2]))
    setting = fibres(experiment)
    rivals = {
        "variable density, no z gradient": Rival(0.4, 0.0),
        "variable density, same range": Rival(0.4, reach),
        "width and range tuned": tuned(setting, options, 24),
    }
    gains = {
        shots: list(reconstruction_gain(specimen, setting, few, rivals, shots).values())
        for shots in (24, 80)
    }
    emit(
        {
            "shots_vs_variable_density": needed["independent"]["variable density, usual"],
            "shots_vs_uniform": needed["independent"]["uniform"],
            "shots_needed": needed,
            "one_detector_shots_vs_variable_density": detector,
            "bound_over_montecarlo": ratio,
            "nrmse_gain": gains[24][0],
            "nrmse_gain_24_shots_none_same_tuned": gains[24],
            "nrmse_gain_80_shots_none_same_tuned": gains[80],
            "plan_seconds": max(seconds.values()),
            "candidates": candidates.count,
            "greedy_over_exhaustive": small,
            "relaxed_gap": relaxed.gap,
        }
    )


if __name__ == "__main__":
    main()
