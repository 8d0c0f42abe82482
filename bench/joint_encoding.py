"""What encoding on the sensor spins adds to encoding on the nuclei.

    python bench/joint_encoding.py --json [--figure joint.png]

(a) One detector sees the field frequency κ = q alone: pairs (k, q) with the same k + q look at the
    same object frequency with depth weights exp(−q z). Depth resolution with no gradient along z,
    with one |q| and with several.
(b) A camera with pixels of four voxels: the nuclear gradient moves the object into the band; the
    sensor gradient moves the field into the band of the optics. Errors with and without.
(c) Tables that choose k and q together against tables that choose them separately (the best k
    with no q, then q drawn at random), at equal time.
All numbers are bounds with an expectation (structure of 12 µm), in units of the expected spread.
"""

from __future__ import annotations

import argparse

import numpy as np
from common import emit, table

from recon import figures
from recon.figures import style
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.bound import Bound, Expectation, Experiment
from recon.planning.candidates import Candidates, Kind, camera_kinds, detector_kinds
from recon.planning.choice import Budget, Choice
from recon.planning.limits import Limits
from recon.specimen import Species

TIMES = np.arange(16) * 8e-3
SPECIES = (
    Species(
        name="lactate",
        shift_ppm=1.33,
        equivalent_nuclei=3,
        t2_star_ms=150.0,
        t1_s=1.5,
        diffusion_um2_per_ms=0.2,
        polarisation=0.05,
    ),
)
LIMITS = Limits(largest_duty_cycle=1.0)


def apparatus(grid: Grid, detector: dict[str, object], photons: float) -> Instrument:
    """The demonstration's layer with another detector; gradients strong enough not to bind."""
    view = (grid.shape[2] * grid.voxel[2] * 1e6, grid.shape[1] * grid.voxel[1] * 1e6)
    kind = "camera" if "pixel_um" in detector else "one_detector"
    return Instrument.model_validate(
        {
            "temperature_C": 25.0,
            "bias_field_mT": (0.0, 0.0, 250.0),
            "sensor_layer": {"depth_um": 0.1, "thickness_um": 1.0, "crystal_cut": "111"},
            "optics": {"numerical_aperture": detector.get("aperture", 0.5), "wavelength_nm": 700.0},
            kind: {"field_of_view_um": view}
            | ({"pixel_um": detector["pixel_um"]} if kind == "camera" else {}),
            "gradients": {
                "nuclear_strength_mT_per_m": 4000.0,
                "nuclear_pulse_max_ms": 10.0,
                "sensor_strength_mT_per_m": 4000.0,
                "sensor_pulse_max_us": 50.0,
            },
            "readout": {
                "photons_per_readout": photons,
                "contrast": 0.03,
                "sensing_time_us": 20.0,
                "efficiency": 0.6,
                "readouts_per_sample": 50,
            },
        }
    )


def errors(experiment: Experiment, kinds: tuple[Kind, ...], shots: int, shortlist: int = 4):
    """Bound over spread per depth, and the axial resolution in µm, of the best table of kinds."""
    candidates = Candidates.of(experiment.grid, experiment.instrument, kinds, LIMITS)
    chosen = Choice(shortlist=shortlist).choose(experiment, candidates, TIMES, Budget(shots=shots))
    bound = Bound.of(experiment, chosen.protocol)
    return bound.standard_error()[0] / bound.unit[0], bound.resolution()[:, 0] * 1e6


def one_detector() -> tuple[dict[str, np.ndarray], dict[str, np.ndarray], Grid]:
    grid = Grid((4, 16, 16), (4e-6, 4e-6, 4e-6))
    experiment = Experiment(apparatus(grid, {}, 1e11), grid, SPECIES, Expectation((20.0,), 12.0))
    rings = {
        "one |q| of 0.1 rad/µm": (0.1,),
        "one |q| of 0.3 rad/µm": (0.3,),
        "|q| from 0.1 to 0.7 rad/µm": (0.1, 0.2, 0.4, 0.7),
    }
    error, width = {}, {}
    for name, waves in rings.items():
        kinds = detector_kinds(grid, waves, 8)
        error[name], width[name] = errors(experiment, kinds, 800, 1)
    return error, width, grid


def coarse_camera() -> tuple[dict[str, np.ndarray], Grid]:
    grid = Grid((2, 32, 32), (2e-6, 2e-6, 2e-6))
    camera = {"pixel_um": 8.0, "aperture": 0.12}
    experiment = Experiment(apparatus(grid, camera, 1e7), grid, SPECIES, Expectation((20.0,), 12.0))
    step = grid.lattice_step[0]
    ring = [round(w * 1e6 / step) for w in (0.4, 0.8)]
    sensor = (
        [(0, 0)]
        + [(s * r, 0) for r in ring for s in (1, -1)]
        + [(0, s * r) for r in ring for s in (1, -1)]
    )
    found = {}
    for name, shifts, nuclear in (
        ("neither gradient", [(0, 0)], False),
        ("sensor gradient only", sensor, False),
        ("nuclear gradient only", [(0, 0)], True),
        ("both gradients", sensor, True),
    ):
        found[name] = camera_errors(experiment, camera_kinds(sensor_steps=tuple(shifts)), nuclear)
    return found, grid


def camera_errors(experiment: Experiment, kinds, nuclear: bool, shots: int = 48) -> np.ndarray:
    """Coarse pixels alias; tables are drawn at random over kinds, the bound is exact."""
    candidates = Candidates.of(experiment.grid, experiment.instrument, kinds, LIMITS)
    rng = np.random.default_rng(1)
    spread = np.linalg.norm(candidates.steps, axis=1)
    chance = np.exp(-0.5 * (spread / 6) ** 2) if nuclear else (spread == 0).astype(float)
    places = rng.choice(len(spread), shots, p=chance / chance.sum())
    pairs = [(int(i % len(kinds)), int(p)) for i, p in enumerate(places)]
    bound = Bound.of(experiment, candidates.protocol(pairs, TIMES))
    return bound.standard_error()[0] / bound.unit[0]


def correlated() -> dict[str, np.ndarray]:
    grid = Grid((4, 16, 16), (4e-6, 4e-6, 4e-6))
    experiment = Experiment(apparatus(grid, {}, 1e11), grid, SPECIES, Expectation((20.0,), 12.0))
    kinds = detector_kinds(grid, (0.1, 0.2, 0.4, 0.7), 8)
    candidates = Candidates.of(grid, experiment.instrument, kinds, LIMITS)
    together, _ = errors(experiment, kinds, 400, 1)
    rng = np.random.default_rng(0)
    spread = np.linalg.norm(candidates.steps, axis=1)
    chance = np.exp(-0.5 * (spread / 5) ** 2)
    places = rng.choice(len(spread), 400, p=chance / chance.sum())
    pairs = list(zip(rng.integers(len(kinds), size=400).tolist(), places.tolist(), strict=True))
    bound = Bound.of(experiment, candidates.protocol(pairs, TIMES))
    return {"together": together, "separately": bound.standard_error()[0] / bound.unit[0]}


def draw(path: str, error: dict[str, np.ndarray], camera: dict[str, np.ndarray], grids) -> None:
    """Errors over height, with and without."""
    with style.applied():
        figure = style.new_figure(style.PAGE_WIDTH, 3.4)
        panels = figure.subplots(1, 2)
        for panel, found, grid, title in zip(
            panels, (error, camera), grids, ("one detector", "camera, 8 µm pixels"), strict=True
        ):
            for number, (name, values) in enumerate(found.items()):
                panel.plot(
                    grid.heights * 1e6,
                    values,
                    color=style.LINES[number],
                    marker=style.MARKERS[number],
                    linestyle=style.DASHES[number],
                    label=name,
                )
            panel.set_xlabel("height above the diamond (µm)")
            panel.set_ylabel("error over expected spread")
            panel.set_ylim(0, 1.05)
            panel.set_title(title, loc="left")
            panel.legend(loc="best", fontsize=8)
    figures.save(figure, path)


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--figure")
    options = parser.parse_args()
    error, width, grid = one_detector()
    heights = [f"{z * 1e6:g} µm" for z in grid.heights]
    print("(a) one detector, 800 shots, no gradient along z: error over spread, axial width in µm")
    table(
        [[n, *error[n], "|", *width[n]] for n in error],
        ["sensor wavevectors", *heights, "|", *heights],
    )
    camera, camera_grid = coarse_camera()
    print("(b) camera, pixels of 8 µm on voxels of 2 µm, 48 shots")
    table(
        [[n, *camera[n]] for n in camera],
        ["encoding", *(f"{z * 1e6:g} µm" for z in camera_grid.heights)],
    )
    tables = correlated()
    print("(c) one detector, 400 shots: k and q chosen together or separately")
    table([[n, *tables[n]] for n in tables], ["tables", *heights])
    if options.figure:
        draw(options.figure, error, camera, (grid, camera_grid))
    names = list(error)
    single = min(float(np.sqrt((error[n] ** 2).mean())) for n in names[:2])
    emit(
        {
            "one_detector_error_several_q_over_best_single_q": float(
                np.sqrt((error[names[2]] ** 2).mean()) / single
            ),
            "camera_error_both_over_nuclear_only": float(
                camera["both gradients"].mean() / camera["nuclear gradient only"].mean()
            ),
            "error_together_over_separately": float(
                tables["together"].mean() / tables["separately"].mean()
            ),
        }
    )


if __name__ == "__main__":
    main()
