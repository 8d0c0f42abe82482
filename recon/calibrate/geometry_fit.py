"""Geometry from a calibration sample whose maps are known.

Gauss–Newton on ‖W^{1/2}(y − A(θ) x)‖² with x the known amounts. Columns of the Jacobian J are
central differences of the general operator, which takes wavevectors off the lattice. With
σ² = E|n|² of a complex sample the information of real θ is 2 Re JᴴWJ.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.ascent import Evaluation, GeometryFit, ascend, chosen, concluded
from recon.calibrate.compressed import Compressed, Progress, compress, inside
from recon.calibrate.estimate import Estimate
from recon.calibrate.geometry_parameters import (
    BIAS,
    LAYER,
    SIGNAL,
    WAVE,
    Quantity,
    described,
    nominal_values,
    wave_directions,
)
from recon.errors import InputError
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.wide import widened
from recon.grid import Grid
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.record import Record
from recon.specimen import Specimen

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

BATCH = 16
"""Shots whose Jacobian is held at a time."""
WAVE_STEP = 0.02
"""Half step of the differences in wavevector, in lattice steps."""
STAGES = (0.25, 0.5, 1.0)
"""Shares of the largest wavenumber: a wrong gradient turns the phase of low wavevectors least."""
FEWEST = 6


def geometry_from_sample(
    record: Record,
    sample: Specimen,
    quantities: Sequence[Quantity | str] = LAYER + BIAS + SIGNAL,
    stated: Sequence[Estimate] = (),
    *,
    shots: NDArray[np.integer] | None = None,
    refinement: tuple[int, int, int] | None = None,
    progress: Progress | None = None,
) -> GeometryFit:
    """Estimate geometry by comparing a record with a sample that is known.

    Parameters
    ----------
    sample
        With maps.
    quantities
        What to estimate, of `recon.calibrate.geometry_parameters`.
    stated
        Values to keep.
    shots
        Numbers of the shots to use; by default those whose wavevectors leave room to the fine
        grid's Nyquist wavenumber.
    refinement
        How much finer than the sample's grid to compute, (z, y, x); by default as fine as the maps.
        Coarser is quicker, and wrong by what the maps vary within a voxel.
    progress
        Called as progress(passes, most passes).

    Raises
    ------
    InputError
        The sample has no maps or does not span the view; a quantity does not exist.
    """
    unknown, values = chosen(quantities, stated, nominal_values(record.instrument))
    scene = _Sample.of(record, sample, refinement or sample.refinement)
    shots = inside(record.protocol, scene.grid) if shots is None else shots
    data = compress(record, shots, species=sample.species)
    passes = 0
    for part in stages(data, unknown):
        fit = _Fit(scene, data if part is None else data.subset(part), unknown)
        values, here, judged, more = ascend(fit, unknown, values, progress)
        passes += more
    return concluded(unknown, stated, values, judged, here.misfit, passes)


def stages(data: Compressed, unknown: Sequence[Quantity]) -> Iterator[NDArray[np.integer] | None]:
    """Shots by growing wavenumber, then all (None); all at once if no gradient is unknown."""
    if any(one.name in WAVE for one in unknown):
        size = np.hypot(*data.protocol.nuclear_wavevector[:, :2].T)
        size = np.maximum(size, np.hypot(*data.protocol.sensor_wavevector.T))
        for share in STAGES[:-1]:
            part = np.flatnonzero(size <= share * size.max())
            if FEWEST <= len(part) < len(data):
                yield part
    yield None


@dataclass(frozen=True, eq=False)
class _Sample:
    """The known sample on its fine grid, widened so that its field does not wrap into the view."""

    grid: Grid
    amounts: ComplexArray
    margin: tuple[int, int]
    origin: tuple[float, float]

    @classmethod
    def of(cls, record: Record, sample: Specimen, refinement: tuple[int, int, int]) -> _Sample:
        maps = _averaged(sample, refinement)
        fine = sample.grid.refined(refinement)
        instrument = record.instrument
        top = fine.heights[-1] + instrument.depth + instrument.thickness
        margin = [
            _whole_pixels(min(2 * top, count * edge / 4), edge, pixel)
            for count, edge, pixel in zip(
                fine.shape[1:], fine.voxel[1:], instrument.pixel, strict=True
            )
        ]
        if instrument.camera is None:
            margin = [0, 0]
        grid = widened(fine, (margin[0], margin[1]))
        amounts = np.zeros((len(sample.species), *grid.shape), np.complex64)
        _, ny, nx = fine.shape
        amounts[..., margin[0] : margin[0] + ny, margin[1] : margin[1] + nx] = maps
        origin = [(d - f) / 2 for d, f in zip(sample.grid.voxel[1:], fine.voxel[1:], strict=True)]
        return cls(grid, amounts, (margin[0], margin[1]), (origin[0], origin[1]))

    def images(self, data: Compressed, instrument: Instrument, protocol: Protocol) -> ComplexArray:
        """A x in the compressed time axis, (shots, components, channels y, channels x)."""
        # phases are zero at the coarse grid's first voxel, which the first fine one precedes
        total = protocol.nuclear_wavevector[:, :2] + protocol.sensor_wavevector
        turn = np.exp(-1j * (total @ np.array(self.origin[::-1])))
        table = replace(protocol, amplitude=protocol.amplitude * turn)
        model = GeneralModel.build(
            self.grid,
            instrument,
            table,
            data.mixing[0],
            1.0,
            margin=self.margin,
            courses=data.mixing,
        )
        return GeneralOperator(model).apply(self.amounts)


def _averaged(sample: Specimen, refinement: tuple[int, int, int]) -> FloatArray:
    """Maps averaged down to a refinement that divides their own."""
    if sample.maps is None:
        raise InputError("the calibration sample has no maps", "calibration", "give its maps")
    pairs = list(zip(sample.refinement, refinement, strict=True))
    if any(want < 1 or have % want for have, want in pairs):
        raise InputError(
            f"refinement {refinement} does not divide that of the maps, {sample.refinement}",
            "calibration",
            "use its divisors",
        )
    parts = [have // want for have, want in pairs]
    counts = [n * want for n, want in zip(sample.grid.shape, refinement, strict=True)]
    split = [length for pair in zip(counts, parts, strict=True) for length in pair]
    return np.asarray(sample.maps.reshape(-1, *split).mean(axis=(2, 4, 6)))


def _whole_pixels(length: float, edge: float, pixel: float) -> int:
    return round(np.ceil(length / pixel) * pixel / edge)


@dataclass(frozen=True, eq=False)
class _Fit:
    """−‖W^{1/2}(y − A(θ)x)‖² with its score and information."""

    sample: _Sample
    data: Compressed
    unknown: tuple[Quantity, ...]

    def __call__(self, values: dict[str, float]) -> Evaluation:
        count = len(self.unknown)
        score, information, energy = np.zeros(count), np.zeros((count, count)), 0.0
        for start in range(0, len(self.data), BATCH):
            part = self.data.subset(np.arange(start, min(start + BATCH, len(self.data))))
            predicted, columns = self._columns(part, values)
            root = np.sqrt(part.weight)[:, None, None, None].astype(np.float32)
            rest = ((part.samples - predicted) * root).ravel()
            jacobian = (columns * root).reshape(count, -1)
            information += 2 * (jacobian.conj() @ jacobian.T).real
            score += 2 * (jacobian.conj() @ rest).real
            energy += float(np.vdot(rest, rest).real)
        samples = self.data.samples.size + self.data.rest_count
        return Evaluation(-energy, score, information, (energy + self.data.rest) / samples)

    def _columns(
        self, part: Compressed, values: dict[str, float]
    ) -> tuple[ComplexArray, ComplexArray]:
        """A x and its derivatives (quantities, shots, components, channels y, channels x)."""
        apparatus, table = described(part.record.instrument, part.protocol, values)
        predicted = self.sample.images(part, apparatus, table)
        wave = WaveDerivatives(
            lambda moved: self.sample.images(part, apparatus, moved), table, self.sample.grid
        )
        columns = np.empty((len(self.unknown), *predicted.shape), np.complex64)
        for place, one in enumerate(self.unknown):
            if one.name == "signal_scale":
                columns[place] = predicted / np.float32(values[one.name])
            elif one.name == "signal_phase_deg":
                columns[place] = predicted * np.complex64(1j * np.pi / 180)
            elif one.name in WAVE:
                columns[place] = wave.along(
                    wave_directions(one, part.record.instrument, part.protocol, values)
                )
            else:
                columns[place] = self._difference(part, one, values)
        return predicted, columns

    def _difference(
        self, part: Compressed, one: Quantity, values: dict[str, float]
    ) -> ComplexArray:
        places = [max(values[one.name] + sign * one.step, one.least) for sign in (1, -1)]
        sides = [
            self.sample.images(
                part, *described(part.record.instrument, part.protocol, {**values, one.name: v})
            )
            for v in places
        ]
        return (sides[0] - sides[1]) / np.float32(places[0] - places[1])


class WaveDerivatives:
    """Derivatives of images with respect to (kx, ky, kz, qx, qy), taken when first wanted.

    Parameters
    ----------
    images
        The images (shots, …) of a table of shots.
    protocol
        The table around which they are taken.
    """

    def __init__(
        self, images: Callable[[Protocol], ComplexArray], protocol: Protocol, grid: Grid
    ) -> None:
        self._images, self._protocol = images, protocol
        lateral = WAVE_STEP * np.array(grid.lattice_step[::-1])
        axial = WAVE_STEP * 2 * np.pi / (grid.shape[0] * grid.voxel[0])
        self._steps = np.array([*lateral, axial, *lateral])
        self._held: dict[int, ComplexArray] = {}

    def along(self, directions: FloatArray) -> ComplexArray:
        """Derivative along a direction (shots, 5) of the wavevectors."""
        total: ComplexArray | None = None
        for part in np.flatnonzero(directions.any(axis=0)):
            share = directions[:, part].astype(np.float32)[:, None, None, None]
            one = share * self._derivative(int(part))
            total = one if total is None else total + one
        if total is None:
            return np.complex64(0) * next(iter(self._held.values()), self._images(self._protocol))
        return total

    def _derivative(self, part: int) -> ComplexArray:
        if part not in self._held:
            step = self._steps[part]
            name = "nuclear_wavevector" if part < 3 else "sensor_wavevector"
            sides = []
            for sign in (1, -1):
                wave = getattr(self._protocol, name).copy()
                wave[:, part if part < 3 else part - 3] += sign * step
                sides.append(self._images(replace(self._protocol, **{name: wave})))
            self._held[part] = (sides[0] - sides[1]) / np.float32(2 * step)
        return self._held[part]
