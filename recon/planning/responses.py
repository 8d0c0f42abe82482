"""What every kind of shot sees, unshifted; a candidate's response is a shift of its kind's."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.forward import ForwardModel, ForwardOperator
from recon.planning.bound import Experiment
from recon.planning.candidates import Candidates

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

Pair = tuple[int, int]
"""A candidate: kind, and place in the list of lateral nuclear wavevectors."""


@dataclass(frozen=True, eq=False)
class Responses:
    """Responses of every kind, unshifted, and how they combine.

    Attributes
    ----------
    candidates
        The kinds and their lateral nuclear wavevectors.
    fields
        P(κ_f + q) K(κ_f) over the grid's band, (fields, nz, ny, nx), monotonic order.
    field_of_kind
        Which of `fields` each kind has, (kinds,): kinds that differ in t1 alone share one.
    footprint
        F over unwrapped object frequencies, (2 ny, 2 nx).
    weight
        Inverse noise variance of a sample.
    aliases
        Voxels per camera pixel along (y, x): so many object frequencies alias onto one another.
    """

    candidates: Candidates
    fields: ComplexArray
    field_of_kind: NDArray[np.intp]
    footprint: FloatArray
    weight: float
    one_detector: bool
    aliases: tuple[int, int]

    @classmethod
    def of(cls, experiment: Experiment, candidates: Candidates) -> Responses:
        """Evaluate the kernels of all kinds through the forward model."""
        parts = [(kind.axis, kind.axial, kind.sensor) for kind in candidates.kinds]
        first = {part: kind for kind, part in reversed(list(enumerate(parts)))}
        place = {part: number for number, part in enumerate(first)}
        centre = int(np.flatnonzero(~candidates.steps.any(axis=1))[0])
        probe = candidates.protocol([(kind, centre) for kind in first.values()], np.zeros(1))
        model: ForwardModel = experiment.model(probe, np.ones((1, 1), complex))
        operator = ForwardOperator(model)
        tables = operator.tables
        fields = np.zeros((len(first), *candidates.grid.shape), np.complex64)
        for shot in range(len(first)):
            response = tables.response(shot)[0]
            if model.is_one_detector:
                row, column = tables.detector_place(shot)
                fields[shot, :, row, column] = response[:, row, column]
            else:
                fields[shot] = response if tables.fused else response * tables.transfer(shot)
        return cls(
            candidates,
            fields * np.float32(np.sqrt(tables.gain)),
            np.array([place[part] for part in parts]),
            operator.footprint.astype(np.float32),
            float(model.encoding.weight[0]),
            model.is_one_detector,
            (1, 1) if model.is_one_detector else model.binning,
        )

    def at(self, pair: Pair) -> ComplexArray:
        """h(κ') of one candidate, (nz, ny, nx), FFT order."""
        kind, place = pair
        _, ny, nx = self.candidates.grid.shape
        shift_y, shift_x = self.candidates.steps[place]
        top, left = ny - ny // 2 - shift_y, nx - nx // 2 - shift_x
        window = self.footprint[top : top + ny, left : left + nx]
        shift = (-(ny // 2 + shift_y), -(nx // 2 + shift_x))
        return np.roll(self.fields[self.field_of_kind[kind]] * window, shift, axis=(-2, -1))
