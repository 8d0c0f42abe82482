"""`nearspin plan`: choose shots, and say beforehand what they will give."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import click
import numpy as np

from recon import figures
from recon.cli.common import progress_line
from recon.errors import InputError
from recon.instrument import Instrument, OneDetector
from recon.planning.bound import Expectation, Experiment
from recon.planning.candidates import (
    Candidates,
    Kind,
    axial_wavenumbers,
    camera_kinds,
    detector_kinds,
)
from recon.planning.choice import Budget, Choice, Criterion, MeanError, WorstError
from recon.planning.feasibility import Feasibility
from recon.planning.limits import Limits, Loss, excitations_of
from recon.planning.trains import AncillaReadout, Hyperpolarised, Thermal, Train, in_train
from recon.protocol import Protocol, SpectralAxis
from recon.specimen import Specimen

NUMBER: dict[str, Any] = {"type": float, "show_default": True}


def settings(command: Callable[..., None]) -> Callable[..., None]:
    """The options, in the order of the job: table, candidates, time axis, nuclei, readout."""
    path = click.Path(path_type=Path)
    options = (
        click.option("-o", "--output", type=path, default=Path("protocol.h5")),
        click.option("--judge", type=path, default=None, help="Only judge this table."),
        click.option("--shots", type=click.IntRange(1), default=None, help="Default 80."),
        click.option("--hours", type=float, default=None, help="Instrument time there is."),
        click.option("--criterion", type=click.Choice(["mean", "worst"]), default="mean"),
        click.option("--plane-weight", type=float, multiple=True, help="One per plane, upwards."),
        click.option("--exchanges", type=click.IntRange(0), default=8, show_default=True),
        click.option("--axis", type=click.IntRange(1, 4), multiple=True, default=(1,)),
        click.option(
            "--axial-rad-per-um",
            type=float,
            multiple=True,
            help="k_z to choose from; by default what the planes need, as far as it reaches.",
        ),
        click.option(
            "--sensor-rad-per-um", type=float, multiple=True, default=(0.05, 0.1, 0.2),
            help="One detector: |q| to choose from.",
        ),
        click.option("--feature-um", default=20.0, help="Of the structure expected.", **NUMBER),
        click.option(
            "--axial-feature-um",
            type=float,
            default=None,
            help="The same along z; as across by default, 0 for independent planes.",
        ),
        click.option("--samples", type=click.IntRange(1), default=32, show_default=True),
        click.option("--sample-interval-ms", default=8.0, **NUMBER),
        click.option("--listen", is_flag=True, help="Record after the gradient."),
        click.option("--one-time-per-shot", is_flag=True, help="Choose t1 with k and q."),
        click.option("--shot-duration-s", default=1.0, help="Of one excitation.", **NUMBER),
        click.option("--clock-tick-s", default=0.0, help="Excitations begin at its multiples."),
        click.option("--duty-cycle", default=0.1, help="Largest.", **NUMBER),
        click.option("--slew-t-per-m-s", default=1e4, **NUMBER),
        click.option(
            "--train", type=click.Choice(["none", "thermal", "hyperpolarised"]), default="none"
        ),
        click.option("--fills", type=click.IntRange(1), default=None, help="Polarised so often."),
        click.option("--per-fill", type=click.IntRange(1), default=16, help="Excitations."),
        click.option("--fill-time-s", default=60.0, **NUMBER),
        click.option("--ancilla-gain", type=float, default=None, help="Repeated ancilla readout."),
        click.option("--ancilla-dead-time-us", default=160.0, **NUMBER),
        click.option("--seed", type=int, default=0, show_default=True),
        click.option("--picture", type=path, default=None, help="Sensitivity over frequency."),
    )  # fmt: skip
    for option in reversed(options):
        command = option(command)
    return command


@dataclass(frozen=True)
class Options:
    """What was asked for; fields are the options."""

    output: Path
    judge: Path | None
    shots: int | None
    hours: float | None
    criterion: str
    plane_weight: tuple[float, ...]
    exchanges: int
    axis: tuple[int, ...]
    axial_rad_per_um: tuple[float, ...]
    sensor_rad_per_um: tuple[float, ...]
    feature_um: float
    axial_feature_um: float | None
    samples: int
    sample_interval_ms: float
    listen: bool
    one_time_per_shot: bool
    shot_duration_s: float
    clock_tick_s: float
    duty_cycle: float
    slew_t_per_m_s: float
    train: str
    fills: int | None
    per_fill: int
    fill_time_s: float
    ancilla_gain: float | None
    ancilla_dead_time_us: float
    seed: int
    picture: Path | None

    def __post_init__(self) -> None:
        if self.listen and self.one_time_per_shot:
            raise InputError("--listen records every time; --one-time-per-shot one", "plan")
        if not self.sample_interval_ms > 0:
            raise InputError("--sample-interval-ms must be positive", "plan")

    def experiment(self, sample: Specimen, apparatus: Instrument) -> Experiment:
        """The specimen's maps serve for the spread alone."""
        amounts = sample.concentrations
        spread = np.maximum(amounts.std((1, 2, 3)), 1e-6 * amounts.max())
        gain = 1.0
        if self.ancilla_gain is not None:
            readout = AncillaReadout(self.ancilla_gain, self.ancilla_dead_time_us)
            gain = readout.noise_gain(apparatus.readout.sensing_time)
        axial = self.feature_um if self.axial_feature_um is None else self.axial_feature_um
        expectation = Expectation(tuple(float(s) for s in spread), self.feature_um, axial)
        return Experiment(apparatus, sample.grid, sample.species, expectation, gain)

    @property
    def times(self) -> tuple[float, ...]:
        """All times of the spectral axis, seconds."""
        return tuple(float(t) for t in np.arange(self.samples) * self.sample_interval_ms * 1e-3)

    @property
    def spectral_axis(self) -> SpectralAxis:
        listen = SpectralAxis.LISTEN_AFTER_ENCODING
        return listen if self.listen else SpectralAxis.EVOLVE_THEN_ENCODE

    @property
    def limits(self) -> Limits:
        """For one excitation per shot."""
        pause = self.fill_time_s / self.per_fill if self.train == "hyperpolarised" else 0.0
        return Limits(
            self.shot_duration_s,
            self.slew_t_per_m_s,
            self.duty_cycle,
            pause_s=pause,
            tick_s=self.clock_tick_s,
        )

    def kinds(self, experiment: Experiment) -> tuple[Kind, ...]:
        evolutions = self.times if self.one_time_per_shot else (0.0,)
        if isinstance(experiment.instrument.detector, OneDetector):
            plain = detector_kinds(experiment.grid, self.sensor_rad_per_um, axes=self.axis)
            return tuple(replace(kind, evolution_s=t) for kind in plain for t in evolutions)
        axial = self.axial_rad_per_um or axial_wavenumbers(experiment.grid, experiment.instrument)
        return camera_kinds(self.axis, axial, evolution_s=evolutions)

    def budget(self, excitations: int) -> Budget:
        """Shots and seconds there are; a hyperpolarised train has so many fills."""
        shots = self.shots if self.shots is not None or self.hours is not None else 80
        if self.train == "hyperpolarised" and self.fills is not None:
            most = self.fills * self.per_fill // excitations
            shots = most if shots is None else min(shots, most)
            if shots < 1:
                raise InputError(
                    f"{self.fills * self.per_fill} polarised excitations make no shot of "
                    f"{excitations}", "--fills", "give more fills, or --one-time-per-shot",
                )  # fmt: skip
        return Budget(shots, None if self.hours is None else 3600 * self.hours)

    def rule(self) -> Criterion:
        return WorstError() if self.criterion == "worst" else MeanError(self.plane_weight)

    def in_train(self, table: Protocol, limits: Limits, t1: float) -> Protocol:
        """The table with the amplitudes of its train."""
        trains: dict[str, Train] = {
            "thermal": Thermal(t1),
            "hyperpolarised": Hyperpolarised(t1, self.per_fill, self.fill_time_s),
        }
        if self.train == "none":
            return table
        return in_train(table, trains[self.train], self.shot_duration_s, limits.excitations)


@click.command("plan")
@click.argument("specimen", type=click.Path(path_type=Path))
@click.argument("instrument", type=click.Path(path_type=Path))
@settings
def verb(specimen: Path, instrument: Path, **given: object) -> None:
    """Choose the shots that tell most of SPECIMEN on INSTRUMENT, and give a verdict.

    The specimen's maps serve only for the amounts and their spread. Where each sample needs an
    evolution of its own (the default), a shot takes as many excitations as it has samples.
    """
    options = Options(**given)  # type: ignore[arg-type]
    sample, apparatus = Specimen.from_toml(specimen), Instrument.from_toml(instrument)
    setting = options.experiment(sample, apparatus)
    if options.judge is not None:
        table = Protocol.load(options.judge)
        table.check_reach(apparatus)
    else:
        table = choose(options, setting)
        table.save(options.output)
    limits = replace(options.limits, excitations=excitations_of(table))
    amounts = sample.concentrations
    present = [float(m[m > 0.01 * m.max()].mean()) if m.max() > 0 else 1e-9 for m in amounts]
    seconds = None if options.hours is None else 3600 * options.hours
    plan = Feasibility(setting, table, tuple(present), seconds, limits)
    click.echo(plan.report())
    if options.picture is not None:
        wave, response = plan.bound.sensitivity()
        picture = figures.sensitivity(
            wave,
            response,
            setting.grid,
            quantity=f"1 / error of {sample.names[0]} by the shots alone",
            unit="1/mM",
        )
        click.echo(f"{figures.save(picture, options.picture)}")


def choose(options: Options, setting: Experiment) -> Protocol:
    """Fill the budget, and put the shots into their train."""
    apparatus, axis = setting.instrument, options.spectral_axis
    times = np.zeros(1) if options.one_time_per_shot else np.array(options.times)
    indirect = axis is SpectralAxis.EVOLVE_THEN_ENCODE
    limits = replace(options.limits, excitations=len(times) if indirect else 1)
    loss = Loss.of(apparatus, limits, setting.species, times if options.listen else None)
    candidates = Candidates.of(setting.grid, apparatus, options.kinds(setting), limits, loss)
    with progress_line() as line:
        chosen = Choice(options.rule(), exchanges=options.exchanges, seed=options.seed).choose(
            setting,
            candidates,
            times,
            options.budget(limits.excitations),
            line.counted("choosing shots"),
            axis,
        )
    t1 = min(one.t1 for one in setting.species)
    table = options.in_train(chosen.protocol, limits, t1)
    click.echo(f"{options.output}: {len(table)} shots of {candidates.count} candidates")
    return table
