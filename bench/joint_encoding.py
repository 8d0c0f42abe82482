"""What encoding on the sensor spins adds to encoding on the nuclei.

    python bench/joint_encoding.py --json [--figure joint.png]

(a) One detector sees the field frequency κ = q alone, and nothing without a sensor gradient: pairs
    (k, q) with the same k + q look at the same object frequency with depth weights exp(−q z).
    Depth resolution with no gradient along z: the best single |q| of four against all four, and
    against that single |q| with a nuclear gradient along z.
(b) A camera with pixels of four voxels and optics that end at 0.7 rad/µm: the nuclear gradient
    moves the object into the band of the field; the sensor gradient moves the field into the band
    of pixels and optics. With and without either.
(c) Tables that choose k and q together against the same k and the same q paired at random, at
    equal time; and how many times the shots the separate table needs for the same error.
Every table is chosen by the bound. All numbers are bounds with an expectation (structure of
12 µm), r.m.s. in units of the expected spread; gradients are strong enough not to bind.
"""

from __future__ import annotations

import argparse
from dataclasses import replace

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
from recon.planning.responses import Pair
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
RINGS = (0.1, 0.2, 0.4, 0.7)


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


def chosen_table(
    experiment: Experiment, kinds: tuple[Kind, ...], shots: int, still: bool = False
) -> tuple[Candidates, list[Pair]]:
    """The best table of these kinds; without any nuclear gradient if `still`."""
    candidates = Candidates.of(experiment.grid, experiment.instrument, kinds, LIMITS)
    if still:
        candidates.allowed[:, candidates.steps.any(axis=1)] = False
    chosen = Choice().choose(experiment, candidates, TIMES, Budget(shots=shots))
    return candidates, chosen.pairs


def bound_of(experiment: Experiment, candidates: Candidates, pairs: list[Pair]):
    """Bound over spread per depth, and the axial width in µm per depth."""
    bound = Bound.of(experiment, candidates.protocol(pairs, TIMES))
    return bound.standard_error()[0] / bound.unit[0], bound.resolution()[:, 0] * 1e6


def total(error: np.ndarray) -> float:
    """R.m.s. over depths."""
    return float(np.sqrt((error**2).mean()))


def detector_scene() -> Experiment:
    grid = Grid((4, 16, 16), (4e-6, 4e-6, 4e-6))
    return Experiment(apparatus(grid, {}, 1e11), grid, SPECIES, Expectation((20.0,), 12.0))


def one_detector(experiment: Experiment, shots: int = 800):
    """Errors and axial widths per depth of each encoding."""
    single = {wave: detector_kinds(experiment.grid, (wave,), 8) for wave in RINGS}
    found = {
        wave: bound_of(experiment, *chosen_table(experiment, kinds, shots))
        for wave, kinds in single.items()
    }
    for wave, (error, _) in found.items():
        print(f"    one |q| of {wave:g} rad/µm: error over spread {total(error):.3f}")
    best = min(found, key=lambda wave: total(found[wave][0]))
    axial = tuple(
        replace(kind, axial=wave) for kind in single[best] for wave in (-4e5, -2e5, 0, 2e5, 4e5)
    )
    several = detector_kinds(experiment.grid, RINGS, 8)
    return {
        f"one |q|, {best:g} rad/µm": found[best],
        f"{best:g} rad/µm and a z gradient": bound_of(
            experiment, *chosen_table(experiment, axial, shots)
        ),
        f"|q| from {RINGS[0]:g} to {RINGS[-1]:g} rad/µm": bound_of(
            experiment, *chosen_table(experiment, several, shots)
        ),
    }


def camera_scene() -> Experiment:
    grid = Grid((2, 32, 32), (2e-6, 2e-6, 2e-6))
    camera = {"pixel_um": 8.0, "aperture": 0.04}
    return Experiment(apparatus(grid, camera, 1e7), grid, SPECIES, Expectation((20.0,), 12.0))


def camera_kinds_with(experiment: Experiment, sensor: bool) -> tuple[Kind, ...]:
    """No sensor gradient, or four directions of two lengths too."""
    if not sensor:
        return camera_kinds()
    step = experiment.grid.lattice_step[0]
    ring = [s * round(w * 1e6 / step) for w in (0.4, 0.8) for s in (1, -1)]
    return camera_kinds(sensor_steps=((0, 0), *((r, 0) for r in ring), *((0, r) for r in ring)))


def coarse_camera(experiment: Experiment, shots: int = 48) -> dict[str, np.ndarray]:
    """Errors per depth with and without either gradient."""
    found = {}
    for name, sensor, still in (
        ("neither gradient", False, True),
        ("sensor gradient only", True, True),
        ("nuclear gradient only", False, False),
        ("both gradients", True, False),
    ):
        kinds = camera_kinds_with(experiment, sensor)
        found[name] = bound_of(experiment, *chosen_table(experiment, kinds, shots, still))[0]
    return found


def apart(experiment: Experiment, candidates: Candidates, pairs: list[Pair], times: int):
    """Errors of five tables with the same k and the same q, `times` as many, paired at random."""
    errors = []
    for seed in range(5):
        rng = np.random.default_rng(seed)
        kinds, places = (np.tile(np.array(side), times) for side in zip(*pairs, strict=True))
        mixed = list(zip(kinds.tolist(), rng.permutation(places).tolist(), strict=True))
        errors.append(total(bound_of(experiment, candidates, mixed)[0]))
    return float(np.mean(errors)), float(np.std(errors))


def same_object_frequencies(
    experiment: Experiment, candidates: Candidates, pairs: list[Pair]
) -> float:
    """The same k + q with q dealt anew at random, where k stays on the lattice; five draws."""
    place_of = {tuple(step): place for place, step in enumerate(candidates.steps.tolist())}
    errors = []
    for seed in range(5):
        dealt = np.random.default_rng(seed).permutation([kind for kind, _ in pairs])
        mixed = []
        for (kind, place), other in zip(pairs, dealt, strict=True):
            away = np.subtract(candidates.kinds[kind].sensor, candidates.kinds[other].sensor)
            moved = place_of.get(tuple((candidates.steps[place] + away).tolist()))
            mixed.append((kind, place) if moved is None else (int(other), moved))
        errors.append(total(bound_of(experiment, candidates, mixed)[0]))
    return float(np.mean(errors))


def correlated(experiment: Experiment, kinds: tuple[Kind, ...], shots: int) -> dict[str, object]:
    """Together, apart at 1, 2, 4 and 8 times the shots, and the factor at equal error."""
    candidates, pairs = chosen_table(experiment, kinds, shots)
    together = total(bound_of(experiment, candidates, pairs)[0])
    factors = (1, 2, 4, 8)
    separate = [apart(experiment, candidates, pairs, times) for times in factors]
    curve = [mean for mean, _ in separate]
    needed = np.inf
    if curve[-1] <= together:
        needed = 2 ** np.interp(-together, -np.array(curve), np.log2(factors))
    return {
        "shots": shots, "together": together, "factors": factors, "separate": separate,
        "needed": float(needed), "same sum": same_object_frequencies(experiment, candidates, pairs),
    }  # fmt: skip


def draw(path: str, detector, camera, tables, grids) -> None:
    """Errors over height with and without; errors over shots together and apart."""
    with style.applied():
        figure = style.new_figure(style.PAGE_WIDTH, 6.4)
        panels = figure.subplots(2, 2)
        found = ({name: error for name, (error, _) in detector.items()}, camera)
        titles = ("(a) one detector", "(b) camera, pixels of 8 µm")
        for panel, errors, grid, title in zip(panels[0], found, grids, titles, strict=True):
            for number, (name, values) in enumerate(errors.items()):
                panel.plot(grid.heights * 1e6, values, label=name, **line(number))
            panel.set_xlabel("height above the diamond (µm)")
            panel.set_title(title, loc="left")
        for panel, (name, result) in zip(panels[1], tables.items(), strict=True):
            shots = result["shots"] * np.array(result["factors"])
            means, spreads = np.array(result["separate"]).T
            panel.errorbar(
                shots, means, spreads, label="the same k and q, paired at random", **line(0)
            )
            panel.plot(
                shots[:1], [result["together"]], label="together", **line(1) | {"linestyle": "none"}
            )
            panel.axhline(result["together"], color=style.FAINT, linewidth=0.8)
            panel.set_xscale("log", base=2)
            panel.set_xticks(shots, [str(n) for n in shots])
            panel.set_xlabel("shots")
            panel.set_title(f"(c) {name}", loc="left")
        for panel in panels.ravel():
            panel.set_ylabel("error over expected spread")
            panel.set_ylim(0, 1.3 * panel.get_ylim()[1])
            panel.legend(loc="upper left", fontsize=8)
    figures.save(figure, path)


def line(number: int) -> dict[str, object]:
    """Colour, marker and dashes of the n-th line."""
    return {
        "color": style.LINES[number],
        "marker": style.MARKERS[number],
        "linestyle": style.DASHES[number],
    }


def ratios(detector, camera, tables) -> dict[str, object]:
    """The study in figures: r.m.s. errors with over without."""
    (one, width), (axial, _), (several, widths) = detector.values()
    return {
        "one_detector_error_several_q_over_best_single_q": total(several) / total(one),
        "one_detector_error_several_q_over_z_gradient": total(several) / total(axial),
        "one_detector_axial_width_several_over_single": float(np.mean(widths / width)),
        "camera_error_sensor_only_over_neither": total(camera["sensor gradient only"])
        / total(camera["neither gradient"]),
        "camera_error_both_over_nuclear_only": total(camera["both gradients"])
        / total(camera["nuclear gradient only"]),
        "error_together_over_separately": {
            name: r["together"] / r["separate"][0][0] for name, r in tables.items()
        },
        "error_together_over_same_sum": {
            name: r["together"] / r["same sum"] for name, r in tables.items()
        },
        "shots_separate_over_together": {name: r["needed"] for name, r in tables.items()},
    }


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--figure")
    options = parser.parse_args()
    scene, coarse = detector_scene(), camera_scene()
    heights = [f"{z * 1e6:g} µm" for z in scene.grid.heights]
    print("(a) one detector, 800 shots: error over spread per height, axial width in µm per height")
    detector = one_detector(scene)
    table(
        [[name, *error, "|", *width] for name, (error, width) in detector.items()],
        ["encoding", *heights, "|", *heights],
    )
    camera = coarse_camera(coarse)
    print("(b) camera, pixels of 8 µm on voxels of 2 µm, optics to 0.7 rad/µm, 48 shots")
    table(
        [[name, *errors] for name, errors in camera.items()],
        ["encoding", *(f"{z * 1e6:g} µm" for z in coarse.grid.heights)],
    )
    tables = {
        "one detector": correlated(scene, detector_kinds(scene.grid, RINGS, 8), 400),
        "camera, pixels of 8 µm": correlated(coarse, camera_kinds_with(coarse, True), 48),
    }
    print(
        "(c) k and q chosen together, q dealt anew at the same k + q, or k and q paired at random"
    )
    table(
        [
            [
                n,
                r["shots"],
                r["together"],
                r["same sum"],
                *(m for m, _ in r["separate"]),
                r["needed"],
            ]
            for n, r in tables.items()
        ],
        [
            "scene",
            "shots",
            "together",
            "same k + q",
            *(f"apart x {n}" for n in (1, 2, 4, 8)),
            "shots needed x",
        ],
    )
    if options.figure:
        draw(options.figure, detector, camera, tables, (scene.grid, coarse.grid))
    emit(ratios(detector, camera, tables))


if __name__ == "__main__":
    main()
