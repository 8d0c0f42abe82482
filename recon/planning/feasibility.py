"""A verdict before anything is switched on: what will be seen, what binds, what would mend it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.planning.bound import DETECTION, Bound, Experiment
from recon.planning.limits import Limits
from recon.protocol import Protocol, SpectralAxis

FloatArray = NDArray[np.floating]
ComplexArray = NDArray[np.complexfloating]

MOST_GAIN = 1e4


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

    def bound(self) -> Bound:
        """The bound; with the loss of the wound pattern while it is listened to."""
        return Bound.of(self.experiment, self.protocol, self._basis())

    def _basis(self) -> ComplexArray:
        basis = species_basis(self.experiment.species, self.experiment.instrument, self.protocol)
        if self.protocol.spectral_axis is not SpectralAxis.LISTEN_AFTER_ENCODING:
            return basis
        return basis * np.exp(-np.outer(self.protocol.sample_times, self.diffusion_rates()))

    def diffusion_rates(self) -> FloatArray:
        """D ⟨k²⟩ over the shots, (species,), 1/s: the mean extra decay while listening."""
        square = float((self.protocol.nuclear_wavevector**2).sum(axis=1).mean())
        return np.array([one.diffusion for one in self.experiment.species]) * square

    def shortfall(self) -> FloatArray:
        """Detection limit over expected amount, (species, nz); above 1 the amount is not seen."""
        return self.bound().detection_limit() / np.asarray(self.amounts_mM)[:, None]

    def seconds(self) -> float:
        """Time of the table with its averages, gradient pulses included."""
        shot = self.limits.shot_time(self.experiment.instrument, self.protocol.nuclear_wavevector)
        clock = self.protocol.clock_time
        waited = float(clock[-1] - clock[0]) + float(shot[-1] * self.protocol.averages[-1])
        return max(float((shot * self.protocol.averages).sum()), waited)

    def binding(self) -> dict[str, float]:
        """By what factor each limit is exceeded (above 1) or kept (below 1)."""
        instrument, grid = self.experiment.instrument, self.experiment.grid
        short = self.shortfall()
        voxel = min(grid.voxel[1:])
        reach = float(instrument.nuclear_wavevector_limit[:2].min())
        closest, width = self.closest_lines()
        length = float(self.protocol.sample_times[-1] - self.protocol.sample_times[0])
        factors = {
            "sensor noise": float(short[:, 0].max()),
            "standoff": float((short[:, -1] / short[:, 0]).max()),
            "gradient strength": np.pi / voxel / reach if reach > 0 else np.inf,
        }
        if np.isfinite(closest):
            factors["spectral resolution"] = (1 / length if length > 0 else np.inf) / closest
            factors["line width"] = width / closest
            if self.protocol.spectral_axis is SpectralAxis.LISTEN_AFTER_ENCODING:
                widest = max(one.diffusion for one in self.experiment.species)
                factors["diffusion"] = np.pi * widest / voxel**2 / closest
        if self.available_s is not None:
            factors["time"] = self.seconds() / self.available_s
        return factors

    def closest_lines(self) -> tuple[float, float]:
        """Least distance between two lines, and the wider of the two's width 1/(π T2*), Hz."""
        species = self.experiment.species
        place = np.array([s.shift_ppm for s in species]) * 1e-6
        place = place * self.experiment.instrument.larmor_frequency
        order = np.argsort(place)
        if len(order) < 2:
            return np.inf, 0.0
        steps = np.diff(place[order])
        at = int(np.argmin(steps))
        width = max(1 / (np.pi * species[order[i]].t2_star) for i in (at, at + 1))
        return float(steps[at]), float(width)

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
        closest, _ = self.closest_lines()
        if self.protocol.spectral_axis is SpectralAxis.LISTEN_AFTER_ENCODING:
            for one in self.experiment.species:
                width = np.pi * one.diffusion / min(grid.voxel[1:]) ** 2
                if width > closest:
                    yield (
                        f"diffusion widens {one.name} to {width:.3g} Hz, beyond the least "
                        f"distance of lines, {closest:.3g} Hz: evolve first, then encode"
                    )
        duty = pulse / self.limits.shot_time(instrument, self.protocol.nuclear_wavevector)
        yield (
            f"gradient duty cycle up to {100 * duty.max():.2g} %: check the heating of the wires "
            "against your own limits and local rules"
        )

    def mends(self) -> Iterator[str]:
        """What would close the largest shortfall, each with its figure."""
        short = self.shortfall()
        worst = float(short.max())
        if worst <= 1:
            return
        species, depth = np.unravel_index(int(short.argmax()), short.shape)
        name = self.experiment.species[species].name
        height = self.experiment.grid.heights[depth] * 1e6
        yield f"for {name} at {height:.3g} µm, short by a factor of {worst:.3g}:"
        share = self.experiment.species[species].polarisation
        start = "thermal" if share is None else f"{share:.2g}"
        gain = self._needed_gain(int(species), int(depth))
        if gain is None:
            yield f"  no gain up to {MOST_GAIN:g} closes it: the shots do not reach this depth"
        else:
            yield f"  {gain:.3g} times the polarisation (now {start}) or signal-to-noise"
            yield f"  or {gain**2:.3g} times the averages: {_duration(self.seconds() * gain**2)}"
        for factor in (2, 4):
            less = self._block_gain(int(species), int(depth), factor)
            yield f"  or reading {factor} x {factor} voxels as one: error divided by {less:.3g}"
        thin = self._thinner(0.5)
        if thin is not None:
            less = float(short[species, depth] / thin[species, depth])
            if less > 1.02:
                yield f"  or half the depth of the layer: error divided by {less:.3g}"
        if self.protocol.spectral_axis is SpectralAxis.LISTEN_AFTER_ENCODING:
            yield "  or evolving first and encoding then, where diffusion does not count"

    def _block_gain(self, species: int, depth: int, factor: int) -> float:
        """Error of a voxel over the error of the mean of factor x factor voxels."""
        bound = self.bound()
        _, ny, nx = self.experiment.grid.shape
        kernel = np.zeros((ny, nx))
        kernel[:factor, :factor] = 1 / factor**2
        transfer = np.abs(np.fft.fft2(kernel)) ** 2
        diagonal = np.einsum("gkqq->gkq", bound._posterior).real
        block = bound.quadratic.plane_mean_of_diagonal(
            diagonal * bound.quadratic.spread_plane(transfer).T
        )
        whole = bound.quadratic.plane_mean_of_diagonal(diagonal)
        return float(np.sqrt(whole[species, depth] / block[species, depth]))

    def _needed_gain(self, species: int, depth: int) -> float | None:
        """Least factor of signal-to-noise at which the amount is detected, by bisection."""
        low, high = 1.0, MOST_GAIN

        def short(gain: float) -> float:
            other = replace(self.experiment, noise_gain=self.experiment.noise_gain * gain)
            return float(replace(self, experiment=other).shortfall()[species, depth])

        if short(high) > 1:
            return None
        for _ in range(10):
            middle = float(np.sqrt(low * high))
            low, high = (middle, high) if short(middle) > 1 else (low, middle)
        return high

    def _thinner(self, share: float) -> FloatArray | None:
        layer = self.experiment.instrument.sensor_layer
        if layer.depth_um <= 0:
            return None
        thin = layer.model_copy(update={"depth_um": layer.depth_um * share})
        instrument = self.experiment.instrument.model_copy(update={"sensor_layer": thin})
        return replace(self, experiment=replace(self.experiment, instrument=instrument)).shortfall()

    def report(self) -> str:
        """One screen."""
        bound = self.bound()
        error, heights = bound.standard_error(), self.experiment.grid.heights * 1e6
        rows = sorted({0, len(heights) // 2, len(heights) - 1})
        lines = [
            f"{len(self.protocol)} shots, {_duration(self.seconds())}; "
            f"structure of {self.experiment.expectation.feature_um:g} µm expected",
            f"{'species':<12}{'expected':>12}  "
            + "".join(f"{f'z {heights[r]:.3g} µm':>26}" for r in rows),
        ]
        for place, one in enumerate(self.experiment.species):
            amount = self.amounts_mM[place]
            cells = []
            for row in rows:
                limit = DETECTION * error[place, row]
                verdict = "seen" if limit <= amount else f"short {limit / amount:.2g} x"
                cells.append(f"{f'± {error[place, row]:.3g} mM, {verdict}':>26}")
            lines.append(f"{one.name:<12}{amount:>9.4g} mM  " + "".join(cells))
        widths = bound.resolution() * 1e6
        told = ", ".join(f"{widths[r, 2]:.3g} µm at z {heights[r]:.3g}" for r in rows)
        lines.append(f"resolution across (with the expectation): {told}")
        factors = self.binding()
        worst = max(factors, key=lambda name: factors[name])
        told = ", ".join(f"{name} {factor:.2g}" for name, factor in factors.items())
        lines.append(f"limits, 1 is just enough: {told}")
        possible = self.shortfall()[:, 0].max() <= 1
        lines.append(
            f"verdict: {'feasible at the lowest plane' if possible else 'not feasible'}; "
            f"{worst} binds"
        )
        lines += list(self.mends())
        lines += [f"note: {text}" for text in self.warnings()]
        return "\n".join(lines)


def _duration(seconds: float) -> str:
    for unit, size in (("years", 3.156e7), ("days", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= 2 * size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds:.3g} s"
