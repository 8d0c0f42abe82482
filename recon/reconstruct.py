"""From a record to maps or a cube."""

from __future__ import annotations

import hashlib
import importlib.metadata
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward import ForwardModel, accumulate
from recon.forward.channels import Channels, LayerDensity
from recon.forward.diffusing import accumulate_joint, joint_memory
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.general_statistics import gather
from recon.forward.grouped import accumulate_grouped, data_term
from recon.forward.lattice import ROUNDING
from recon.priors import Frame, LocalLowRank, NonNegative, Prior, TotalVariation
from recon.record import Record
from recon.result import Account, Result
from recon.solvers.estimate import Estimator, Progress, silent
from recon.solvers.general import GeneralQuadratic
from recon.solvers.penalised import Penalised
from recon.unknown import AnyStatistics, SpeciesAmounts, Unknown

ComplexArray = NDArray[np.complexfloating]


def default_estimator(unknown: Unknown, record: Record | None = None) -> Estimator:
    """Total variation; amounts are also non-negative. The weight chooses itself.

    A cube has its edges in common over time. It is of low rank besides: where all shots share
    their times its courses are compressed to the leading ones, and where each has an evolution
    time of its own every patch is taken to hold few independent courses.
    """
    if unknown.real:
        return Penalised((TotalVariation(), NonNegative()))
    if record is not None and len(record.protocol.evolutions[0]) > 1:
        return Penalised((TotalVariation(joint=True), LocalLowRank()))
    return Penalised((TotalVariation(joint=True),))


def reconstruct(
    record: Record,
    unknown: Unknown | None = None,
    estimator: Estimator | None = None,
    *,
    progress: Progress = silent,
    memory_limit_gib: float = 8.0,
    reality: Reality | None = None,
) -> Result:
    """Reconstruct a record on its specimen's grid.

    Minimises ½‖W^{1/2}(y − A x)‖² plus what the estimator assumes.

    Parameters
    ----------
    unknown
        `SpeciesAmounts()` (default) or `ComplexCube()`.
    estimator
        `Ridge()` or `Penalised(...)`; by default total variation.
    progress
        Called with what is being done and its share done.
    memory_limit_gib
        The work is refused if it would need more.
    reality
        What breaks the blocks; by default what the record itself says (`Reality.of`).

    Raises
    ------
    InputError
        The record does not fit its grid, is blind to a species, or memory would not suffice.
    """
    unknown = unknown or SpeciesAmounts()
    estimator = estimator or default_estimator(unknown, record)
    _check_memory(estimate_memory(record, unknown, estimator), memory_limit_gib)
    reading = Reading(record)
    reality = reality or Reality.of(record)
    expand: ComplexArray | None = None
    read: AnyStatistics | None
    whole: Any
    if reality is None:
        read = read_statistics(reading, unknown, progress)
        statistics, expand = unknown.compressed(read)
        whole, sensitivity = data_term(statistics, unknown.real), statistics.sensitivity()
    else:
        read, whole = None, reality.data_term(reading, unknown, progress)
        sensitivity = np.sqrt(whole.diagonal().mean(axis=1))
    unit = unit_sizes(sensitivity)
    unknown.check(record, read)
    quadratic = whole.scaled(unit)
    frame = Frame(quadratic.shape, record.specimen.grid.voxel, unit)
    estimate = estimator.estimate(quadratic, frame, progress).in_units(unit)
    account = Account(
        prior=str(estimator),
        weights=estimate.weights,
        why_stopped=estimate.reason.value,
        misfit=estimate.misfit,
        provenance=provenance(reading, estimator),
        remarks=estimate.remarks,
    )
    return unknown.result(record, estimate, expand, account)


def _check_memory(need: int, limit_gib: float) -> None:
    if need > limit_gib * 2**30:
        raise InputError(
            f"needs about {need / 2**30:.1f} GiB, the limit is {limit_gib:g} GiB",
            "reconstruction",
            "raise the limit, or use fewer voxels or species",
        )


def unit_sizes(sensitivity: NDArray[np.floating]) -> NDArray[np.floating]:
    """Units in which every component has unit sensitivity.

    Raises
    ------
    InputError
        The record is blind to a component.
    """
    if not (sensitivity > 1e-6 * sensitivity.max()).all() or sensitivity.max() == 0:
        raise InputError(
            f"the record is blind to component {int(np.argmin(sensitivity)) + 1}",
            "protocol",
            "check sensing axes, gradients and sample times",
        )
    return 1 / sensitivity


@dataclass(frozen=True)
class Reality:
    """What a real apparatus adds to the ideal model; the general operator then takes its place.

    Wavevectors may lie off the lattice. The grid must be the camera's view.

    Attributes
    ----------
    channels
        Gain and relative weight of every channel: dead pixels, vignetting, noise of their own.
    layer
        Density of the sensor layer, where it is patchy.
    """

    channels: Channels | None = None
    layer: LayerDensity | None = None

    @classmethod
    def of(cls, record: Record) -> Reality | None:
        """What a record says of itself: channels that differ, wavevectors off the lattice.

        None if the blocks hold for it.
        """
        channels = None
        if record.channel_weight is not None:
            weight = record.channel_weight.astype(float)
            channels = Channels(np.ones(weight.shape, complex), weight)
        grid, protocol = record.specimen.grid, record.protocol
        on_lattice = all(
            np.abs(steps - np.rint(steps)).max(initial=0) <= ROUNDING
            for steps in (
                protocol.nuclear_wavevector[:, 1::-1] / np.array(grid.lattice_step),
                protocol.sensor_wavevector[:, ::-1] / np.array(grid.lattice_step),
            )
        )
        return None if channels is None and on_lattice else cls(channels)

    def data_term(
        self, reading: Reading, unknown: Unknown, progress: Progress = silent
    ) -> GeneralQuadratic:
        """The data term of a record, read once."""
        record = reading.record
        if unknown.diffusing(record) is not None:
            raise InputError(
                "real channels with diffusion are not modelled", "reconstruction", "choose one"
            )
        model = GeneralModel.build(
            record.specimen.grid,
            record.instrument,
            record.protocol,
            unknown.basis(record),
            record.noise_sd,
            channels=self.channels,
            layer=self.layer,
        )
        if len(record.protocol.evolutions[0]) > 1:
            raise InputError("has several evolution times", "protocol", "use the ideal model")
        operator = GeneralOperator(model, np.complex64)
        statistics = gather(
            operator, reading.shots(), lambda done: progress("reading shots", done / len(record))
        )
        return GeneralQuadratic(operator, statistics, unknown.real)


class Reading:
    """A record that is read once, and the digest of its samples after that."""

    def __init__(self, record: Record) -> None:
        self.record = record
        self._digest = hashlib.sha256()

    def shots(self) -> Iterator[tuple[slice, NDArray[np.complex64]]]:
        """The record's shots in order."""
        for where, samples in self.record.shots():
            self._digest.update(np.ascontiguousarray(samples).data)
            yield where, samples

    @property
    def digest(self) -> str:
        """SHA-256 of the samples that were read, hexadecimal."""
        return self._digest.hexdigest()


def read_statistics(
    reading: Reading | Record, unknown: Unknown, progress: Progress = silent
) -> AnyStatistics:
    """One pass over the record: b, G, energy."""
    record = reading.record if isinstance(reading, Reading) else reading

    def show(done: int) -> None:
        progress("reading shots", done / len(record))

    diffusing = unknown.diffusing(record)
    if diffusing is not None:
        return accumulate_joint(diffusing, reading.shots(), show)
    evolutions, group = record.protocol.evolutions
    models = [
        ForwardModel.build(
            record.specimen.grid,
            record.instrument,
            record.protocol,
            unknown.basis(record, float(evolution)),
            record.noise_sd,
        )
        for evolution in evolutions
    ]
    if len(models) == 1:
        return accumulate(models[0], reading.shots(), show)
    return accumulate_grouped(models, group, reading.shots(), show)


def estimate_memory(record: Record, unknown: Unknown, estimator: Estimator | None = None) -> int:
    """Bytes that a reconstruction takes at its peak, roughly: blocks, their factors, and images.

    A solver keeps about seven arrays of the size of each prior's image D x, and eight of the
    unknown's; eight copies of the blocks exist while errors or the first step are worked out.
    """
    components = unknown.components(record)
    grid = record.specimen.grid
    shape = (components, *grid.shape)
    cube = np.prod(shape) * (4 if unknown.real else 8)
    frame = Frame(shape, grid.voxel, np.ones(components))
    priors: Sequence[Prior] = getattr(estimator or default_estimator(unknown, record), "priors", ())
    images = sum(prior.on(frame).redundancy for prior in priors)
    one_detector = record.shape[2:] == (1, 1)
    pixel_y, pixel_x = (
        1.0 if one_detector else max(1.0, pixel / edge)
        for pixel, edge in zip(record.instrument.pixel, grid.voxel[1:], strict=True)
    )
    aliases = pixel_y * pixel_x
    size = (components if unknown.real else 1) * grid.shape[0] * aliases
    count = np.prod(grid.shape[1:]) / aliases
    if unknown.real and aliases == 1:
        count *= (grid.shape[2] // 2 + 1) / grid.shape[2]
    diffusing = unknown.diffusing(record)
    reading = 0 if diffusing is None else joint_memory(diffusing)
    return int(reading + (8 + 7 * images) * cube + 8 * (8 * size**2 * count))


def provenance(reading: Reading, estimator: Any) -> dict[str, Any]:
    """Versions, digests, settings and date, as plain JSON values."""
    record = reading.record
    names = ("nearspin", "numpy", "scipy", "pywavelets")
    return {
        "versions": {name: importlib.metadata.version(name) for name in names},
        "record_sha256": reading.digest,
        "protocol_sha256": record.protocol.digest(),
        "shots": len(record),
        "noise_sd_T": record.noise_sd,
        "estimator": repr(estimator),
        "date": datetime.now(UTC).isoformat(timespec="seconds"),
    }
