"""Errors of exact least squares over many noisy records, against the bound known beforehand.

    python bench/bound.py --json

Cramér–Rao bound of every plane: the mean diagonal of G⁻¹ over object frequencies, known from the
table of shots alone. Monte-Carlo: records of noise (simulated sample by sample), one pass each,
exact solve without any prior.
"""

from __future__ import annotations

import numpy as np
from common import emit, table
from scene import MICRON, NOISE

from recon.forward import BlockQuadratic, ForwardModel, accumulate
from recon.grid import Grid
from recon.planning.tables import UniformRandom
from recon.symbol import Symbol
from tests.cases import instrument

REPLICAS = 200


def main() -> None:
    grid = Grid((4, 32, 32), (4 * MICRON,) * 3)
    shots = UniformRandom(shots=256, axes=(1, 2, 3, 4), axial_bound_rad_per_um=0.8)
    protocol = shots.protocol(grid, np.zeros(1))
    apparatus = instrument("camera", grid, pixel_um=4.0)
    model = ForwardModel.build(grid, apparatus, protocol, np.ones((1, 1), complex), NOISE)
    rng = np.random.default_rng(0)
    sums = np.zeros(grid.shape[0])
    bound = solve = None
    for _ in range(REPLICAS):
        noise = rng.standard_normal((model.sample_count, 2), np.float32).view(np.complex64)
        samples = noise.reshape(len(protocol), 1, *model.channels) * np.float32(NOISE * 0.5**0.5)
        statistics = accumulate(model, [(slice(0, len(protocol)), samples)])
        quadratic = BlockQuadratic(statistics)
        if bound is None or solve is None:
            inverse = quadratic.matrix.inverse().per_block
            bound = np.sqrt(quadratic.plane_mean(inverse)[0])
            solve = quadratic.step(Symbol(0.0))
        sums += (np.abs(solve(quadratic.linear)) ** 2).mean(axis=(0, 2, 3))
    assert bound is not None
    measured = np.sqrt(sums / REPLICAS)
    error = measured / np.sqrt(2 * REPLICAS * grid.shape[1] * grid.shape[2])
    table(
        [
            [f"{height / MICRON:g} µm", b, m, f"{m / b:.4f} ± {e / b:.4f}"]
            for height, b, m, e in zip(grid.heights, bound, measured, error, strict=True)
        ],
        ["plane", "bound (A/m)", "measured (A/m)", "measured / bound"],
    )
    ratio = measured / bound
    emit({"montecarlo_over_bound": ratio.tolist(), "worst": float(np.abs(ratio - 1).max())})


if __name__ == "__main__":
    main()
