"""Do the error bars cover the truth? Intervals of re-noised replicas on simulated data.

    python bench/error_bars.py --json

For every species and depth: share of voxels whose truth lies within one standard error (68 %
nominal) and 1.96 (95 %), share of bias in the stated mean squared error, and the time of all
replicas over that of one cold solve.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
import time

import numpy as np
from common import emit, table
from weights import PRIORS, Scene, scenes

from recon.solvers.penalised import Penalised
from recon.solvers.weight import Fixed, SteinRisk


def covered(scene: Scene, x: np.ndarray, error: np.ndarray) -> np.ndarray:
    """Shares within 1 and 1.96 standard errors, (2, species, nz)."""
    unit = scene.unit[:, None, None, None]
    off = np.abs(x * unit - scene.truth)
    return np.array([(off <= width * error * unit).mean(axis=(2, 3)) for width in (1.0, 1.96)])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="accepted for uniformity")
    parser.add_argument("--specimen", choices=("muscle", "micrograph"), action="append")
    given = parser.parse_args()
    figures: dict[str, object] = {}
    for name in given.specimen or ("muscle", "micrograph"):
        scene = next(s for s in scenes((name,)) if s.shots == 96 and s.noise == 1.0)
        rule = SteinRisk()
        plain = Penalised(PRIORS, weight=rule, replicas=None, resolution=None)
        weight = next(iter(plain.estimate(scene.quadratic, scene.frame).weights.values()))
        cold = Penalised(PRIORS, weight=Fixed(weight), replicas=None, resolution=None)
        begin = time.perf_counter()
        cold.estimate(scene.quadratic, scene.frame)
        single = time.perf_counter() - begin
        full = Penalised(PRIORS, weight=Fixed(weight), resolution=None)
        begin = time.perf_counter()
        found = full.estimate(scene.quadratic, scene.frame)
        cost = (time.perf_counter() - begin - single) / single
        assert found.standard_error is not None
        shares = covered(scene, found.x, found.standard_error)
        rows = [
            [
                name,
                species,
                depth,
                f"{shares[0, species, depth]:.2f}",
                f"{shares[1, species, depth]:.2f}",
            ]
            for species in range(shares.shape[1])
            for depth in range(shares.shape[2])
        ]
        table(rows, ["specimen", "species", "depth", "68 %", "95 %"])
        for remark in found.remarks:
            print(remark)
        print(f"{name}: replicas cost {cost:.1f} cold solves of {single:.2f} s")
        figures[f"{name}_cover68"] = float(shares[0].mean())
        figures[f"{name}_cover95"] = float(shares[1].mean())
        figures[f"{name}_cover68_by_depth"] = shares[0].mean(axis=0).tolist()
        figures[f"{name}_cover95_by_depth"] = shares[1].mean(axis=0).tolist()
        figures[f"{name}_replicas_over_solve"] = cost
    emit(figures)


if __name__ == "__main__":
    main()
