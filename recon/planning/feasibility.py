"""A verdict before anything is switched on: what will be seen, what binds, what would mend it."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.instrument import OneDetector
from recon.physics.diffusion import line_width
from recon.planning.bound import Bound, Experiment
from recon.planning.limits import Limits, Loss
from recon.planning.mends import duration, mends
from recon.protocol import Protocol, SpectralAxis
from recon.specimen import Species

FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Feasibility:
    """One experiment, one table of shots, and the time there is.

    Attributes
    ----------
    amounts_mM
        Expected amounts where there is any, (species,).
    available_s
        Instrument time, or None.
    """

    experiment: Experiment
    protocol: Protocol
    amounts_mM: tuple[float, ...]  # noqa: N815
    available_s: float | None = None
    limits: Limits = field(default_factory=Limits)

    @cached_property
    def bound(self) -> Bound:
        """The bound; with what diffusion takes during pulses and while the pattern is heard.

        Pulses: each shot's amplitude falls by its own loss, a mean over species. Listening: each
        species' decay is faster by D times the shots' mean k².
        """
        protocol = self.protocol
        left = np.sqrt(self._pulse_loss().power_left(protocol.nuclear_wavevector))
        weakened = replace(protocol, amplitude=protocol.amplitude * left)
        if not self._listens:
            return Bound.of(self.experiment, weakened)
        basis = species_basis(self.experiment.species, self.experiment.instrument, protocol)
        faster = np.exp(-np.outer(protocol.sample_times, self.diffusion_rates()))
        return Bound.of(self.experiment, weakened, basis * faster)

    @property
    def _listens(self) -> bool:
        return self.protocol.spectral_axis is SpectralAxis.LISTEN_AFTER_ENCODING

    def _pulse_loss(self) -> Loss:
        return Loss.of(self.experiment.instrument, self.limits, self.experiment.species)

    def diffusion_rates(self) -> FloatArray:
        """D ⟨k²⟩ over the shots, (species,), 1/s: the mean extra decay while listening."""
        square = float((self.protocol.nuclear_wavevector**2).sum(axis=1).mean())
        return np.array([one.diffusion for one in self.experiment.species]) * square

    def shortfall(self) -> FloatArray:
        """Detection limit over expected amount, (species, nz); above 1 the amount is not seen."""
        return self.bound.detection_limit() / np.asarray(self.amounts_mM)[:, None]

    def seconds(self) -> float:
        """Time of the table with averages, excitations and gradient pulses, or by its clock."""
        protocol = self.protocol
        shot = self.limits.shot_time(
            self.experiment.instrument, protocol.nuclear_wavevector, protocol.evolution_time
        )
        clock = protocol.clock_time
        waited = float(clock[-1] - clock[0]) + float(shot[-1] * protocol.averages[-1])
        return max(float((shot * protocol.averages).sum()), waited)

    def binding(self) -> dict[str, float]:
        """By what factor each limit is exceeded (above 1) or kept (below 1).

        Sensor noise: detection limit over amount in the lowest plane. Standoff: how much worse
        the highest plane is than the lowest, or than just enough. Gradient strength: wavenumber
        of a voxel, π/d, over what nuclear gradient and field band reach together. Spectral
        resolution and line width: over the distance to the next line. Diffusion: width πD/d² while
        listening, over the same. Time: needed over available.
        """
        grid, protocol = self.experiment.grid, self.protocol
        short = self.shortfall()
        voxel = min(grid.voxel[1:])
        times = protocol.sample_times + protocol.evolution_time[:, None]
        length = float(times.max() - times.min())
        factors = {
            "sensor noise": float(short[:, 0].max()),
            "standoff": float((short[:, -1] / np.maximum(short[:, 0], 1)).max()),
            "gradient strength": np.pi / voxel / self.lateral_reach(),
        }
        if len(self.experiment.species) > 1:
            longest = 1 / length if length > 0 else np.inf
            factors["spectral resolution"] = self.crowding(lambda one: longest)
            factors["line width"] = self.crowding(lambda one: 1 / (np.pi * one.t2_star))
            if self._listens:
                factors["diffusion"] = self.crowding(lambda one: line_width(one.diffusion, voxel))
        if self.available_s is not None:
            factors["time"] = self.seconds() / self.available_s
        return factors

    def lateral_reach(self) -> float:
        """Highest object wavenumber that is encoded, rad/m: nuclear gradient plus field band.

        The field band ends at 1/(height + depth) of the lowest plane, at the pixels or the optical
        cut-off 4π NA/λ of a camera, at the sensor gradient of one detector.
        """
        instrument = self.experiment.instrument
        heard = 1 / (float(self.experiment.grid.heights[0]) + instrument.depth)
        sensor = float(instrument.sensor_wavevector_limit.min())
        if isinstance(instrument.detector, OneDetector):
            heard = min(heard, sensor)
        else:
            cut = 4 * np.pi * instrument.optics.numerical_aperture / instrument.optics.wavelength
            heard = min(heard, sensor + min(np.pi / max(instrument.pixel), cut))
        return max(float(instrument.nuclear_wavevector_limit[:2].min()) + heard, 1e-300)

    def neighbours(self) -> Iterator[tuple[float, Species, Species]]:
        """Species whose lines are next to each other, and the distance, Hz."""
        hertz = self.experiment.instrument.larmor_frequency * 1e-6
        order = sorted(self.experiment.species, key=lambda one: one.shift_ppm)
        for low, high in itertools.pairwise(order):
            yield (high.shift_ppm - low.shift_ppm) * hertz, low, high

    def crowding(self, width: Callable[[Species], float]) -> float:
        """Largest line width over the distance to the next line."""
        found = [
            max(width(low), width(high)) / distance if distance > 0 else np.inf
            for distance, low, high in self.neighbours()
        ]
        return max(found, default=0.0)

    def warnings(self) -> Iterator[str]:
        """What the user should know of, beyond the numbers."""
        grid, instrument = self.experiment.grid, self.experiment.instrument
        pulse = self.limits.pulse_time(instrument, self.protocol.nuclear_wavevector)
        voxel = min(grid.voxel)
        for one in self.experiment.species:
            if one.diffusion > 0 and pulse.max() > voxel**2 / (2 * one.diffusion):
                yield (
                    f"{one.name} crosses a voxel in {voxel**2 / (2 * one.diffusion) * 1e3:.3g} ms, "
                    f"less than the longest gradient pulse of {pulse.max() * 1e3:.3g} ms: use "
                    "stronger, shorter pulses"
                )
        if self._listens:
            edge = min(grid.voxel[1:])
            for distance, *pair in self.neighbours():
                for one in pair:
                    width = line_width(one.diffusion, edge)
                    if width > distance:
                        yield (
                            f"diffusion widens {one.name} to {width:.3g} Hz, beyond the distance "
                            f"between {pair[0].name} and {pair[1].name}, {distance:.3g} Hz: evolve "
                            "first, then encode"
                        )
        duty = pulse / (self.limits.base_duration_s + self.limits.pause_s + pulse)
        yield (
            f"gradient duty cycle up to {100 * duty.max():.2g} %: check the heating of the wires "
            "against your own limits and local rules"
        )

    def report(self) -> str:
        """One screen."""
        factors = self.binding()
        told = ", ".join(f"{name} {factor:.2g}" for name, factor in factors.items())
        lines = [
            f"{len(self.protocol)} shots, {duration(self.seconds())}; "
            f"structure of {self.experiment.expectation.feature_um:g} µm expected",
            *self._errors(),
            f"limits, 1 is just enough: {told}",
            f"verdict: {verdict(factors)}",
            *mends(self),
        ]
        return "\n".join(lines + [f"note: {text}" for text in self.warnings()])

    def _errors(self) -> Iterator[str]:
        """Errors, detection limits and resolution in the lowest, a middle and the highest plane."""
        error, limit = self.bound.standard_error(), self.bound.detection_limit()
        heights = self.experiment.grid.heights * 1e6
        rows = sorted({0, len(heights) // 2, len(heights) - 1})
        table = [["mM, ± error, limit", "expected", *(f"z {heights[r]:.3g} µm" for r in rows)]]
        for place, one in enumerate(self.experiment.species):
            amount, cells = self.amounts_mM[place], []
            for row in rows:
                much = limit[place, row] / amount
                seen = "seen" if much <= 1 else f"{much:.2g} x short"
                cells.append(f"± {error[place, row]:.3g}, {limit[place, row]:.3g}, {seen}")
            table.append([one.name, f"{amount:.4g}", *cells])
        widths = self.bound.resolution() * 1e6
        cells = [f"{widths[r, 2]:.3g} across, {widths[r, 0]:.3g} along z" for r in rows]
        table.append(["resolution, µm", "", *cells])
        sizes = [max(map(len, column)) for column in zip(*table, strict=True)]
        for name, *cells in table:
            right = (cell.rjust(size) for cell, size in zip(cells, sizes[1:], strict=True))
            yield "  ".join([name.ljust(sizes[0]), *right])


def verdict(factors: dict[str, float]) -> str:
    """Feasible or not, and what binds."""
    worst = max(factors, key=lambda name: factors[name])
    if factors[worst] <= 1:
        return f"feasible; {worst} is nearest to its limit"
    excess = f"{worst} binds, by a factor of {factors[worst]:.3g}"
    if factors["sensor noise"] <= 1 and factors.get("time", 0) <= 1:
        return f"feasible at the lowest plane, with limits: {excess}"
    return f"not feasible: {excess}"
