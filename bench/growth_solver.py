"""How the solver's time and memory grow with the problem.

    python bench/growth_solver.py --json

Seconds per voxel, component and iteration of ADMM with total variation, from 32² to 256² voxels
across and 1 to 32 components, complex (a cube over time: components share their blocks) and real
species that share a block. The exponent is that of N log N with N the voxels of a plane. Peak
memory of a run over the size of one cube, the blocks (with their copies) counted apart.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import tracemalloc

import numpy as np
from common import emit, table, timed
from growth import exponent
from scene import experiment, random_complex

from recon.forward import BlockQuadratic, accumulate
from recon.priors import Frame, TotalVariation
from recon.solvers import ADMM, Problem, Stopping, Weighted, solve

SIDES = (32, 64, 128, 256)
COMPONENTS = (1, 4, 32)
DEPTH, SHOTS = 4, 12
SETTLED = ADMM(balance_every=0)


def problem_of(side: int, components: int) -> Problem:
    """A cube of `components` times."""
    model, _ = experiment((DEPTH, side, side), SHOTS, np.eye(components, dtype=complex))
    y = random_complex((SHOTS, components, *model.channels)) * np.float32(1e-9)
    statistics = accumulate(model, [(slice(0, SHOTS), y)])
    quadratic = BlockQuadratic(statistics.scaled(1 / statistics.sensitivity()))
    frame = Frame(quadratic.shape, model.grid.voxel, np.ones(components))
    return Problem(quadratic, (Weighted(TotalVariation(joint=True).on(frame), 1.0),))


def seconds_per_iteration(problem: Problem, repeats: int) -> float:
    """Median time of an iteration after the step is factorised."""
    state = solve(problem, SETTLED, Stopping(0.0, limit=1)).state

    def iterate() -> None:
        SETTLED.advance(problem, state)

    return timed(iterate, repeats).seconds


def peak_cubes(problem: Problem) -> float:
    """Peak memory of a solve less the factorised blocks, over one cube."""
    quadratic = problem.quadratic
    assert isinstance(quadratic, BlockQuadratic)
    tracemalloc.start()
    solve(problem, SETTLED, Stopping(0.0, limit=3))
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    cube = np.prod(quadratic.shape) * quadratic.dtype.itemsize
    blocks = quadratic.matrix.entries.nbytes
    return float((peak - 3 * blocks) / cube)


def main() -> None:
    rows, slopes, peaks = [], {}, []
    for components in COMPONENTS:
        times = []
        for side in SIDES:
            problem = problem_of(side, components)
            cells = DEPTH * side**2 * components
            seconds = seconds_per_iteration(problem, 3 if cells > 1e6 else 9)
            times.append(seconds)
            peak = peak_cubes(problem)
            peaks.append(peak)
            per_cell = 1e9 * seconds / cells
            rows.append([f"{side} x {side} x {DEPTH}", components, per_cell, f"{peak:.1f}"])
        slopes[components] = exponent(np.square(SIDES, dtype=float), np.array(times))
    table(rows, ["voxels", "components", "ns per voxel·component·iteration", "peak, cubes"])
    for components, (slope, error) in slopes.items():
        print(f"{components} components: exponent over N log N {slope:.3f} ± {error:.3f}")
    worst = max((slope for slope, _ in slopes.values()), key=lambda value: abs(value - 1))
    emit(
        {
            "solver_exponent": worst,
            "solver_exponents": [slope for slope, _ in slopes.values()],
            "peak_cubes_beside_blocks": max(peaks),
        }
    )


if __name__ == "__main__":
    main()
