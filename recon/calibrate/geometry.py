"""Which of the geometry is estimated, from what, and what of it is worth carrying in.

Lateral gradients come first, since a wrong one blurs the image that tells the standoff. A
correction that noise may explain, or that turns no phase in the view noticeably, is reported but
not carried in: it would cost the blocks their exactness and gain nothing.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from recon.calibrate.ascent import GeometryFit
from recon.calibrate.decomposition import decomposition
from recon.calibrate.estimate import Estimate
from recon.calibrate.evidence import standoff_from_record
from recon.calibrate.geometry_fit import geometry_from_sample
from recon.calibrate.geometry_from_record import geometry_from_record
from recon.calibrate.geometry_parameters import EVERY, LATERAL, WAVE, with_geometry
from recon.calibrate.gradients_fit import gradients_from_record
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.record import Record
from recon.solvers.estimate import Progress
from recon.specimen import Specimen

SIGNIFICANT = 3.0
"""Standard errors that a correction must be away from the description to be carried in."""

NOTICEABLE_STEPS = 0.02
"""Change of the largest wavevector, in lattice steps, below which gradients stay nominal."""


@dataclass(frozen=True)
class Geometry:
    """What is estimated.

    Attributes
    ----------
    layer
        Names of the layer's and the bias field's quantities.
    gradients
        Names of the gradients' quantities.
    sample
        A specimen with maps that was measured, or None where it is unknown.
    """

    layer: tuple[str, ...] = ("depth_um",)
    gradients: tuple[str, ...] = tuple(one.name for one in LATERAL)
    sample: Specimen | None = None


@dataclass(frozen=True, eq=False)
class FoundGeometry:
    """Estimates of the geometry.

    Attributes
    ----------
    estimates
        As they were found or stated.
    derived
        Strengths, rotation and shear that follow.
    carried
        Those that are carried into the descriptions.
    lines
        What the record cannot tell.
    """

    estimates: tuple[Estimate, ...]
    derived: tuple[Estimate, ...]
    carried: tuple[Estimate, ...]
    lines: tuple[str, ...]

    def applied(self, record: Record) -> tuple[Instrument, Protocol]:
        """The record's descriptions with what is carried."""
        return with_geometry(record.instrument, record.protocol, self.carried)


def measure_geometry(
    record: Record, settings: Geometry, stated: Sequence[Estimate], progress: Progress
) -> FoundGeometry:
    """Estimate what is asked for and not stated."""
    record = without_gaps(record)
    names = {one.name for one in stated}
    gradients = [name for name in settings.gradients if name not in names]
    layer = [name for name in settings.layer if name not in names]

    def show(done: int, most: int) -> None:
        progress("comparing geometries", done / max(most, 1))

    fit: GeometryFit | None = None
    if settings.sample is not None and (layer or gradients):
        wanted = [*layer, *gradients]
        fit = geometry_from_sample(record, settings.sample, wanted, stated, progress=show)
    elif layer and gradients:
        fit = geometry_from_record(record, [*gradients, *layer], stated, progress=show)
    elif gradients:
        fit = gradients_from_record(record, gradients, stated, progress=show)
    elif layer:
        fit = standoff_from_record(record, layer, stated, progress=show)
    if fit is None:
        return FoundGeometry(tuple(stated), (), tuple(stated), ())
    found = [one for one in fit.estimates if one.name not in names]
    return FoundGeometry(
        (*found, *stated),
        decomposition(fit).estimates,
        (*stated, *_carried(record, found)),
        fit.undetermined,
    )


def _carried(record: Record, found: Sequence[Estimate]) -> list[Estimate]:
    """Corrections that are significant and noticeable; a matrix is carried whole or not at all."""
    waves = [one for one in found if one.name in WAVE]
    others = [one for one in found if one.name not in WAVE and _significant(record, one)]
    if not waves or not any(_significant(record, one) for one in waves):
        return others
    _, moved = with_geometry(record.instrument, record.protocol, waves)
    step = np.array(record.specimen.grid.lattice_step)[::-1]
    change = (
        np.abs(moved.nuclear_wavevector[:, :2] - record.protocol.nuclear_wavevector[:, :2]) / step
    )
    turn = np.abs(moved.sensor_wavevector - record.protocol.sensor_wavevector) / step
    noticeable = max(change.max(), turn.max()) > NOTICEABLE_STEPS
    return [*waves, *others] if noticeable else others


def _significant(record: Record, one: Estimate) -> bool:
    nominal = EVERY[one.name].nominal
    if nominal is None:
        nominal = float(getattr(record.instrument.sensor_layer, one.name))
    return one.known and abs(one.value - nominal) > SIGNIFICANT * one.standard_error


def without_gaps(record: Record) -> Record:
    """The record with channels that carry no weight at zero.

    A few zeros lower every spatial frequency alike; filling them from their neighbours would lower
    high ones more, which looks like a greater standoff.
    """
    weight = record.channel_weight
    if weight is None or weight.min() > 0:
        return replace(record, channel_weight=None)
    samples = record.samples_in_memory() * (weight > 0)
    return replace(record, source=samples, channel_weight=None)
