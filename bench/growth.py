"""How the time of the operator and of one pass grows with the problem.

    python bench/growth.py --json

Time per voxel and shot of A x, Aᴴ y and the blocks of G, from 32² to 256² voxels across and 4 to
16 planes, fitted as (N log N)^p with N the voxels of a plane; p = 1 is what FFTs cost.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
from common import emit, side_by_side, table
from scene import experiment, random_complex

from recon.forward import ForwardOperator
from recon.forward.normal import normal_blocks

SIDES = (32, 64, 128, 256)
DEPTHS = (4, 8, 16)
SHOTS = 24


def exponent(sizes: np.ndarray, seconds: np.ndarray) -> tuple[float, float]:
    """Slope of log seconds over log(N log N), with its standard error."""
    work = np.log(sizes * np.log(sizes))
    design = np.stack([work, np.ones_like(work)], axis=1)
    solution, rest, *_ = np.linalg.lstsq(design, np.log(seconds), rcond=None)
    variance = float(rest[0]) / max(len(work) - 2, 1) if len(rest) else 0.0
    return float(solution[0]), float(np.sqrt(variance * np.linalg.inv(design.T @ design)[0, 0]))


def main() -> None:
    rows, slopes = [], []
    for depth in DEPTHS:
        total = []
        for side in SIDES:
            model, _ = experiment((depth, side, side), SHOTS)
            operator = ForwardOperator(model)
            x = random_complex(operator.object_shape)
            y = random_complex(operator.sample_shape, 1)
            found = side_by_side(
                {
                    "forward": lambda operator=operator, x=x: operator.apply(x),
                    "adjoint": lambda operator=operator, y=y: operator.adjoint(y),
                    "blocks": lambda operator=operator: normal_blocks(operator),
                },
                repeats=3 if side == 256 else 7,
            )
            cells = depth * side**2 * SHOTS
            per_cell = [1e9 * found[name].seconds / cells for name in found]
            rows.append([f"{side} x {side} x {depth}", *(f"{value:.2f}" for value in per_cell)])
            total.append(found["forward"].seconds + found["adjoint"].seconds)
        slopes.append(exponent(np.square(SIDES, dtype=float), np.array(total)))
    table(rows, ["voxels", "A x, ns per voxel·shot", "Aᴴ y", "blocks of G"])
    for depth, (slope, error) in zip(DEPTHS, slopes, strict=True):
        print(f"depth {depth}: exponent over N log N {slope:.3f} ± {error:.3f}")
    worst = max((slope for slope, _ in slopes), key=lambda value: abs(value - 1))
    emit({"exponent": worst, "exponents": [slope for slope, _ in slopes]})


if __name__ == "__main__":
    main()
