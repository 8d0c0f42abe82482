"""Error and structural similarity against shots and noise, for every estimator.

    python bench/quality.py --json [--figure quality.png]

A real micrograph as amounts of two species (the mapping is assumed), simulated records. Matched
filter, exact least squares, ridge with its own weight and with the best (found with the truth),
wavelet sparsity, total variation, and the default. The error is the r.m.s. over species of
‖x − truth‖/‖truth‖; structural similarity is the mean over planes and species (scikit-image).
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
from pathlib import Path

import numpy as np
from common import emit, table
from skimage.metrics import structural_similarity
from solver_cases import micrograph_specimen
from weights import Scene, clean, scene_of

from recon.priors import NonNegative, Prior, TotalVariation, WaveletSparsity
from recon.solvers.penalised import Penalised
from recon.solvers.ridge import Ridge
from recon.symbol import Symbol

SHOTS = (16, 32, 64, 128, 256, 512)
NOISES = (0.5, 1.0, 2.0, 4.0)
DEFAULT: tuple[Prior, ...] = (TotalVariation(), NonNegative())


def estimates(scene: Scene) -> dict[str, np.ndarray]:
    """Every estimator's unknown, in units of unit sensitivity."""
    quadratic, frame = scene.quadratic, scene.frame
    b = quadratic.linear

    def penalised(*priors: Prior) -> np.ndarray:
        settings = Penalised(priors, replicas=None, resolution=None)
        return settings.estimate(quadratic, frame).x

    tiny = 1e-6 * quadratic.largest
    candidates = (
        quadratic.step(Symbol(weight))(b)
        for weight in np.geomspace(1e-3, 1, 19) * quadratic.largest
    )
    filtered = b / quadratic.diagonal()[..., None, None]
    fit = float(np.vdot(filtered, b).real / np.vdot(filtered, quadratic.normal(filtered)).real)
    return {
        "matched filter": fit * filtered,
        "least squares": quadratic.step(Symbol(tiny))(b),
        "ridge": Ridge().estimate(quadratic, frame).x,
        "ridge, best weight": min(candidates, key=scene.error),
        "wavelet": penalised(WaveletSparsity()),
        "total variation": penalised(TotalVariation()),
        "default": penalised(*DEFAULT),
    }


def similarity(scene: Scene, x: np.ndarray) -> float:
    """Mean structural similarity over planes and species."""
    values = []
    for found, truth, unit in zip(x, scene.truth, scene.unit, strict=True):
        for plane, true in zip(found * unit, truth, strict=True):
            spread = float(np.ptp(true))
            values.append(structural_similarity(plane, true, data_range=spread))
    return float(np.mean(values))


def figure(path: Path, errors: dict[str, np.ndarray]) -> None:
    """Error against shots and against noise."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    from recon.figures import style

    with plt.rc_context(getattr(style, "SETTINGS", {})):
        picture, axes = plt.subplots(1, 2, figsize=(8.0, 3.6), sharey=True, layout="constrained")
        for place, (name, both) in enumerate(errors.items()):
            line = {"marker": "o", "markersize": 3, "linewidth": 1.2, "color": f"C{place}"}
            if name == "default":
                line |= {"linewidth": 2.4, "color": "black"}
            axes[0].plot(SHOTS, both[: len(SHOTS)], label=name, **line)
            axes[1].plot(NOISES, both[len(SHOTS) :], **line)
        for axis, ticks, label in zip(
            axes, (SHOTS, NOISES), ("shots (noise as stated)", "noise (64 shots)"), strict=True
        ):
            axis.set(xscale="log", yscale="log", xlabel=label, ylim=(0.05, 300))
            axis.set_xticks(ticks, [f"{tick:g}" for tick in ticks])
            axis.minorticks_off()
        axes[0].set_yticks((0.1, 1, 10, 100), ("0.1", "1", "10", "100"))
        axes[0].set_ylabel("relative error")
        picture.legend(loc="outside right upper", frameon=False, fontsize=8)
        picture.savefig(path, dpi=150)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="accepted for uniformity")
    parser.add_argument("--figure", type=Path)
    given = parser.parse_args()
    specimen = micrograph_specimen()
    record = clean("micrograph", specimen, max(SHOTS))
    settings = [(shots, 1.0) for shots in SHOTS] + [(64, noise) for noise in NOISES]
    rows, errors, alike = [], {}, {}
    for shots, noise in settings:
        scene = scene_of("micrograph", specimen, record, shots, noise)
        for name, x in estimates(scene).items():
            errors.setdefault(name, []).append(scene.error(x))
            alike.setdefault(name, []).append(similarity(scene, x))
            row = [shots, noise, name, f"{errors[name][-1]:.3f}", f"{alike[name][-1]:.3f}"]
            rows.append(row)
    table(rows, ["shots", "noise", "estimator", "error", "structural similarity"])
    at = settings.index((64, 1.0))
    if given.figure:
        figure(given.figure, {name: np.array(values) for name, values in errors.items()})
    emit(
        {
            "default_over_best_ridge_64": errors["default"][at] / errors["ridge, best weight"][at],
            "error_64": {name: values[at] for name, values in errors.items()},
            "similarity_64": {name: values[at] for name, values in alike.items()},
        }
    )


if __name__ == "__main__":
    main()
