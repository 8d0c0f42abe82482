"""What choosing the shots is worth, and what it costs.

    python bench/planning.py --json

Muscle section 64 × 64 × 6, three hyperpolarised metabolites, camera. Shots that the chosen plan
needs for the mean error of 128 random ones; the bound against Monte-Carlo; reconstruction error at
equal time; seconds to choose 256 shots from over 100 000 candidates; the greedy table against the
best of all on a small problem, and against the relaxed lower bound on the large one.
"""

from __future__ import annotations

import itertools
import time

import numpy as np
from common import emit, table

from recon.demo import INTERVAL, SAMPLES, instrument
from recon.forward import ForwardOperator, accumulate
from recon.forward.block_matrix import BlockMatrix
from recon.grid import Grid
from recon.planning.bound import Bound, Expectation, Experiment
from recon.planning.candidates import Candidates, camera_kinds
from recon.planning.choice import Budget, Choice, WorstError, information_of
from recon.planning.relaxed import lower_bound
from recon.planning.tables import UniformRandom, VariableDensity
from recon.priors import NonNegative, TotalVariation
from recon.protocol import Protocol, SpectralAxis
from recon.reconstruct import reconstruct
from recon.simulate import simulate
from recon.solvers.penalised import Penalised
from recon.specimen import Specimen
from recon.specimens.muscle import Muscle

TIMES = np.arange(SAMPLES) * INTERVAL
AXIAL = tuple(np.round(np.linspace(-0.36, 0.36, 25), 3))
FEATURE_UM = 20.0


def mean_error(experiment: Experiment, protocol: Protocol) -> float:
    """R.m.s. over species and depths of the bound with the prior, in units of the spread."""
    error = Bound.of(experiment, protocol).standard_error()
    return float(
        np.sqrt(((error / np.array(experiment.expectation.spread_mM)[:, None]) ** 2).mean())
    )


def random_table(kind: type, grid: Grid, shots: int, seed: int) -> Protocol:
    """The best of two axial bounds, so that the comparison is fair."""
    made = kind(shots=shots, seed=seed, axial_bound_rad_per_um=0.3)
    return made.protocol(grid, TIMES, spectral_axis=SpectralAxis.EVOLVE_THEN_ENCODE)


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
    rng = np.random.default_rng(0)
    sigma = np.sqrt(0.5 / model.encoding.weight)[:, None, None, None]
    total = np.zeros((len(unit), experiment.grid.shape[0]))
    for _ in range(replicas):
        white = rng.standard_normal((len(unit), *experiment.grid.shape))
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


def reconstruction_gain(specimen, experiment, candidates, shots: int) -> float:
    """Error with the chosen table over that with variable density, mean over species."""
    chosen = Choice(criterion=WorstError()).choose(
        experiment, candidates, TIMES, Budget(shots=shots)
    )
    ours = nrmse(specimen, chosen.protocol)
    theirs = np.mean(
        [nrmse(specimen, random_table(VariableDensity, specimen.grid, shots, s)) for s in (0, 1)], 0
    )
    rows = [[n, o, t, o / t] for n, o, t in zip(specimen.names, ours, theirs, strict=True)]
    print(f"reconstruction error, {shots} shots")
    table(rows, ["species", "chosen", "variable density", "ratio"])
    return float(np.mean(ours / theirs))


def main() -> None:
    whole = Muscle.small().specimen()
    specimen = Specimen(
        whole.grid, whole.species[1:], whole.maps[1:], whole.refinement, whole.notes
    )
    spread = tuple(float(s) for s in specimen.concentrations.std((1, 2, 3)))
    experiment = Experiment(
        instrument(), specimen.grid, specimen.species, Expectation(spread, FEATURE_UM)
    )
    candidates = Candidates.of(specimen.grid, instrument(), camera_kinds((1,), AXIAL))
    begin = time.perf_counter()
    chosen = Choice().choose(experiment, candidates, TIMES, Budget(shots=256))
    seconds = time.perf_counter() - begin
    print(f"{candidates.count} candidates, 256 shots chosen in {seconds:.1f} s")
    rows, needed = [], {}
    for kind in (VariableDensity, UniformRandom):
        goals = [
            mean_error(experiment, random_table(kind, specimen.grid, 128, seed))
            for seed in (0, 1, 2)
        ]
        needed[kind] = [shots_needed(experiment, candidates, chosen.pairs, g) / 128 for g in goals]
        rows.append(
            [
                kind.__name__,
                np.mean(goals),
                f"{np.mean(needed[kind]):.3f} ± {np.std(needed[kind]):.3f}",
            ]
        )
    at_128 = mean_error(experiment, candidates.protocol(chosen.pairs[:128], TIMES))
    table(rows, ["128 random shots", "mean error / spread", "chosen shots needed ÷ 128"])
    print(f"chosen, 128 shots: mean error / spread {at_128:.4f}")
    ratio = monte_carlo(experiment, candidates.protocol(chosen.pairs[:64], TIMES))
    relaxed = lower_bound(information_of(experiment, candidates, TIMES), chosen.pairs[:128], 30)
    small = exhaustive()
    print(f"greedy above the relaxed lower bound by at most {100 * relaxed.gap:.2f} % (128 shots)")
    print(f"greedy with exchange over the best of all 4-shot tables: {small:.4f}")
    few = Candidates.of(specimen.grid, instrument(), camera_kinds((1,), AXIAL[::6]))
    gains = {shots: reconstruction_gain(specimen, experiment, few, shots) for shots in (24, 80)}
    emit(
        {
            "shots_vs_variable_density": np.mean(needed[VariableDensity]),
            "shots_vs_uniform": np.mean(needed[UniformRandom]),
            "bound_over_montecarlo": ratio,
            "nrmse_gain": gains[24],
            "nrmse_gain_80_shots": gains[80],
            "plan_seconds": seconds,
            "candidates": candidates.count,
            "greedy_over_exhaustive": small,
            "relaxed_gap": relaxed.gap,
        }
    )


if __name__ == "__main__":
    main()
