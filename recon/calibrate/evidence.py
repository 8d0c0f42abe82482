"""Standoff, thickness, bias direction and axial gradients from a record of something unknown.

These leave the blocks of AᴴWA exact, and lateral gradients nearly so. The evidence of a stationary
Gaussian prior (`recon.calibrate.stationary`) can therefore be maximised over them together with the
prior's own hyperparameters. The unknown is taken as complex and its components, an orthonormal
basis of what the species do over time, as independent: a phase common to all shots drops out.

Depth and height above the face act alike: what tells them apart is that nothing lies below the
face and that planes resemble each other. So the standard error, the inverse Hessian of the
evidence with the prior's numbers at their best, is that of a sample which the prior describes.
What the sample does within a voxel comes on top: about a hundredth of the voxel's height in
simulated records, and more for the layer's thickness, which hardly shows in the field.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.ascent import GeometryFit, chosen, concluded
from recon.calibrate.climb import climb
from recon.calibrate.compressed import Compressed, Progress, compress, inside
from recon.calibrate.estimate import Estimate
from recon.calibrate.geometry_parameters import (
    AXIAL,
    BIAS,
    LAYER,
    NUCLEAR_MATRIX,
    SENSOR_MATRIX,
    Quantity,
    nominal_values,
)
from recon.calibrate.identifiable import told
from recon.calibrate.shifted import block_statistics
from recon.calibrate.stationary import evidence
from recon.errors import InputError
from recon.record import Record

FloatArray = NDArray[np.floating]

ALLOWED = frozenset(one.name for one in LAYER + BIAS + AXIAL + NUCLEAR_MATRIX + SENSOR_MATRIX)
ROUNDING = 1e-12
"""Error of the evidence, in parts of the record's energy."""


def standoff_from_record(
    record: Record,
    quantities: Sequence[Quantity | str] = LAYER[:1],
    stated: Sequence[Estimate] = (),
    *,
    shots: NDArray[np.integer] | None = None,
    components: int | None = None,
    progress: Progress | None = None,
) -> GeometryFit:
    """Estimate standoff, thickness, bias direction, axial gradients without knowing the sample.

    Lateral gradients are better left to `gradients_from_record` unless they are nearly right.

    Parameters
    ----------
    quantities
        Of `LAYER`, `BIAS`, `AXIAL` and the matrices.
    stated
        Values to keep, calibrated gradients among them; these may lie off the lattice.
    shots, components
        Part of the record to use: shots by number, and how many components of the time axis.
    progress
        Called as progress(passes, most passes).

    Raises
    ------
    InputError
        A quantity is told another way, or the record has several evolution times.
    """
    unknown, values = chosen(quantities, stated, nominal_values(record.instrument))
    for one in unknown:
        if one.name not in ALLOWED:
            raise InputError(
                f"{one.name} is not told this way", "calibration", "use gradients_from_record"
            )
    data = unmixed(record, shots, components)
    search = _Search(data, unknown, values)
    return search.run(stated, progress)


def unmixed(
    record: Record, shots: NDArray[np.integer] | None, components: int | None
) -> Compressed:
    """The record in an orthonormal time basis that all shots share.

    Raises
    ------
    InputError
        The record has several evolution times, or a number of components below 1 is asked for.
    """
    if len(record.protocol.evolutions[0]) > 1:
        raise InputError(
            "has several evolution times", record.where, "calibrate with a sample that is known"
        )
    if components is not None and components < 1:
        raise InputError(f"{components} components", "calibration", "use at least 1")
    shots = inside(record.protocol, record.specimen.grid) if shots is None else shots
    data = compress(record, shots)
    return data if components is None else data.strongest(components)


@dataclass(eq=False)
class _Search:
    """Newton's method on the evidence."""

    data: Compressed
    unknown: tuple[Quantity, ...]
    values: dict[str, float]
    passes: int = 0
    _known: dict[tuple[float, ...], float] = field(default_factory=dict)

    def run(self, stated: Sequence[Estimate], progress: Progress | None) -> GeometryFit:
        reach = np.array([one.reach for one in self.unknown])
        begin = np.array([self.values[one.name] for one in self.unknown]) / reach
        steps = np.array([one.step for one in self.unknown]) / reach
        least = np.array([one.least for one in self.unknown]) / reach
        noise = ROUNDING * self.data.energy
        point, hessian = climb(self._value, begin, steps, least, noise, progress)
        judged = told(hessian / np.outer(reach, reach), self.unknown)
        values = self._values_of(point)
        best = evidence(block_statistics(self.data, values))
        samples = self.data.samples.size + self.data.rest_count
        misfit = (self.data.energy - best.explained + self.data.rest) / samples
        return concluded(self.unknown, stated, values, judged, misfit, self.passes)

    def _values_of(self, point: FloatArray) -> dict[str, float]:
        values = dict(self.values)
        for one, place in zip(self.unknown, point, strict=True):
            values[one.name] = max(float(place * one.reach), one.least)
        return values

    def _value(self, point: FloatArray) -> float:
        key = tuple(point)
        if key not in self._known:
            self.passes += 1
            found = evidence(block_statistics(self.data, self._values_of(point)))
            self._known[key] = found.value
        return self._known[key]
