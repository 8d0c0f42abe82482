"""`nearspin plan`: choose shots, and say beforehand what they will give."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from recon.cli.common import progress_line
from recon.instrument import Instrument, OneDetector
from recon.planning.bound import Expectation, Experiment
from recon.planning.candidates import Candidates, camera_kinds, detector_kinds
from recon.planning.choice import Budget, Choice, Criterion, MeanError, WorstError
from recon.planning.feasibility import Feasibility
from recon.planning.limits import Limits
from recon.planning.trains import AncillaReadout, Hyperpolarised, Thermal, in_train
from recon.protocol import Protocol
from recon.specimen import Specimen

CRITERIA: dict[str, Criterion] = {"mean": MeanError(), "worst": WorstError()}


@click.command("plan")
@click.argument("specimen", type=click.Path(path_type=Path))
@click.argument("instrument", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), default=Path("protocol.h5"))
@click.option(
    "--judge", type=click.Path(path_type=Path), default=None, help="Only judge this table."
)
@click.option("--shots", type=click.IntRange(1), default=None, help="Default 80.")
@click.option("--hours", type=float, default=None, help="Instrument time there is.")
@click.option("--criterion", type=click.Choice(list(CRITERIA)), default="mean", show_default=True)
@click.option("--axis", "axes", type=click.IntRange(1, 4), multiple=True, default=(1,))
@click.option(
    "--axial-rad-per-um", type=float, multiple=True, default=(-0.3, -0.15, 0.0, 0.15, 0.3)
)
@click.option("--sensor-rad-per-um", type=float, multiple=True, default=(0.05, 0.1, 0.2))
@click.option("--feature-um", type=float, default=20.0, show_default=True)
@click.option("--samples", type=click.IntRange(1), default=32, show_default=True)
@click.option("--sample-interval-ms", type=float, default=8.0, show_default=True)
@click.option("--shot-duration-s", type=float, default=1.0, show_default=True)
@click.option("--duty-cycle", type=float, default=0.1, show_default=True, help="Largest.")
@click.option("--train", type=click.Choice(["none", "thermal", "hyperpolarised"]), default="none")
@click.option("--fills", type=click.IntRange(1), default=None, help="Times polarised, at most.")
@click.option("--shots-per-fill", type=click.IntRange(1), default=16, show_default=True)
@click.option("--fill-time-s", type=float, default=60.0, show_default=True)
@click.option("--ancilla-gain", type=float, default=None, help="Repeated ancilla readout.")
@click.option("--ancilla-dead-time-us", type=float, default=160.0, show_default=True)
@click.option("--seed", type=int, default=0, show_default=True)
def verb(
    specimen: Path,
    instrument: Path,
    output: Path,
    judge: Path | None,
    shots: int | None,
    hours: float | None,
    criterion: str,
    axes: tuple[int, ...],
    axial_rad_per_um: tuple[float, ...],
    sensor_rad_per_um: tuple[float, ...],
    feature_um: float,
    samples: int,
    sample_interval_ms: float,
    shot_duration_s: float,
    duty_cycle: float,
    train: str,
    fills: int | None,
    shots_per_fill: int,
    fill_time_s: float,
    ancilla_gain: float | None,
    ancilla_dead_time_us: float,
    seed: int,
) -> None:
    """Choose the shots that tell most of SPECIMEN on INSTRUMENT, and give a verdict.

    The specimen's maps serve only for the amounts and their spread.
    """
    sample, apparatus = Specimen.from_toml(specimen), Instrument.from_toml(instrument)
    amounts = sample.concentrations
    spread = np.maximum(amounts.std((1, 2, 3)), 1e-6 * amounts.max())
    gain = 1.0
    if ancilla_gain is not None:
        readout = AncillaReadout(ancilla_gain, ancilla_dead_time_us)
        gain = readout.noise_gain(apparatus.readout.sensing_time)
    expectation = Expectation(tuple(float(s) for s in spread), feature_um)
    setting = Experiment(apparatus, sample.grid, sample.species, expectation, gain)
    limits = Limits(shot_duration_s, largest_duty_cycle=duty_cycle)
    seconds = None if hours is None else 3600 * hours
    if judge is not None:
        table = Protocol.load(judge)
        table.check_reach(apparatus)
    else:
        if isinstance(apparatus.detector, OneDetector):
            kinds = detector_kinds(sample.grid, sensor_rad_per_um, axes=axes)
        else:
            kinds = camera_kinds(axes, axial_rad_per_um)
        candidates = Candidates.of(sample.grid, apparatus, kinds, limits)
        count = shots if shots is not None or seconds is not None else 80
        if train == "hyperpolarised" and fills is not None:
            count = min(count or fills * shots_per_fill, fills * shots_per_fill)
        with progress_line() as line:
            chosen = Choice(CRITERIA[criterion], seed=seed).choose(
                setting,
                candidates,
                np.arange(samples) * sample_interval_ms * 1e-3,
                Budget(count, seconds),
                line.counted("choosing shots"),
            )
        table = chosen.protocol
        t1 = min(one.t1 for one in sample.species)
        if train == "thermal":
            table = in_train(table, Thermal(t1), shot_duration_s)
        elif train == "hyperpolarised":
            filled = Hyperpolarised(t1, shots_per_fill, fill_time_s)
            table = in_train(table, filled, shot_duration_s)
        table.save(output)
        click.echo(f"{output}: {len(table)} shots of {candidates.count} candidates")
    present = [float(m[m > 0.01 * m.max()].mean()) if m.max() > 0 else 1e-9 for m in amounts]
    click.echo(Feasibility(setting, table, tuple(present), seconds, limits).report())
