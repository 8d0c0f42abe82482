"""Lateral gradient matrices and delays from a record of something unknown.

Separable least squares: with x̂ = (AᴴWA + Γ⁻¹)⁻¹AᴴWy at the present gradients, the residual
y − A x̂ depends on the gradients through J = P⊥ (∂A/∂θ) x̂, P⊥ = 1 − A(AᴴWA + Γ⁻¹)⁻¹AᴴW
(variable projection, Golub & Pereyra 1973, in Kaufman's simplification, BIT 15:49, 1975).
Gauss–Newton on that; the information is 2 Re JᴴWJ. The prior Γ is the stationary one of
`recon.calibrate.stationary`, its numbers those of largest evidence.

The pixels are the ruler. The sample's position is left open with the unknown itself. The
determinant in the evidence is left out: it is flat in what turns and stretches lateral wavevectors,
but not in k_z, which is why the axial entries are told by `recon.calibrate.evidence`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.ascent import Evaluation, GeometryFit, ascend, chosen, concluded
from recon.calibrate.compressed import Compressed, Progress
from recon.calibrate.estimate import Estimate
from recon.calibrate.evidence import unmixed
from recon.calibrate.geometry_fit import WaveDerivatives, stages
from recon.calibrate.geometry_parameters import (
    AXIAL,
    LATERAL,
    WAVE,
    Quantity,
    described,
    nominal_values,
    wave_directions,
)
from recon.calibrate.regularised import Regularised
from recon.calibrate.shifted import block_statistics
from recon.calibrate.stationary import START, Shape
from recon.errors import InputError
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.statistics import Statistics
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.record import Record

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

COMPONENTS = 2
SOLVED = 1e-3
PROJECTED = 3e-2
BATCH = 16


def gradients_from_record(
    record: Record,
    quantities: Sequence[Quantity | str] = LATERAL,
    stated: Sequence[Estimate] = (),
    *,
    shots: NDArray[np.integer] | None = None,
    components: int | None = COMPONENTS,
    progress: Progress | None = None,
) -> GeometryFit:
    """Estimate what the gradients wind without knowing the sample.

    Parameters
    ----------
    quantities
        Of `GRADIENTS` without `AXIAL`.
    stated
        Values to keep, layer and bias among them.
    shots, components
        Part of the record to use: shots by number, and how many components of the time axis.
    progress
        Called as progress(passes, most passes).

    Raises
    ------
    InputError
        A quantity is none of the lateral gradients', or the record has several evolution times.
    """
    unknown, values = chosen(quantities, stated, nominal_values(record.instrument))
    for one in unknown:
        if one.name not in WAVE or one in AXIAL:
            raise InputError(
                f"{one.name} is no lateral gradient's", "calibration", "use standoff_from_record"
            )
    data = unmixed(record, shots, components)
    passes = 0
    for part in stages(data, unknown):
        fit = _Separable.of(data if part is None else data.subset(part), unknown, values)
        values, here, judged, more = ascend(fit, unknown, values, progress)
        passes += more
    return concluded(unknown, stated, values, judged, here.misfit, passes)


def moment_variance(statistics: Statistics, shape: Shape, data: Compressed) -> FloatArray:
    """v_c for which the samples have the energy that was measured, whatever the gradients.

    Energy expected of unit variance is the trace of ΓG, noise adds 1 per sample.
    """
    root = shape.root(statistics)
    q = root.shape[1]
    normal = statistics.normal.reshape(q, q, -1)
    traces = np.einsum("kqp,qrk,krp->k", root, normal, root, optimize=True).real
    power = (np.abs(data.samples) ** 2).sum(axis=(2, 3), dtype=float)
    excess = data.weight @ power - data.samples[:, 0].size
    return np.asarray(np.maximum(excess, 1.0) / traces[1:].sum())


@dataclass(eq=False)
class _Separable:
    """−min over x of ‖W^{1/2}(y − A(θ)x)‖² + xᴴΓ⁻¹x with its score and information."""

    data: Compressed
    unknown: tuple[Quantity, ...]
    shape: Shape
    variance: FloatArray
    start: ComplexArray | None = field(default=None)

    @classmethod
    def of(
        cls, data: Compressed, unknown: tuple[Quantity, ...], values: dict[str, float]
    ) -> _Separable:
        statistics = block_statistics(data, values)
        return cls(data, unknown, START, moment_variance(statistics, START, data))

    def __call__(self, values: dict[str, float]) -> Evaluation:
        apparatus, table = described(self.data.record.instrument, self.data.protocol, values)
        solver = Regularised(block_statistics(self.data, values), self.shape, self.variance)
        components = self.data.samples.shape[1]
        weight = self.data.weight[:, None, None, None].astype(np.float32)
        operator = self._operator(apparatus, table, components)
        right = operator.adjoint(self.data.samples * weight)
        x, self.start = solver.solve(operator, right, SOLVED, self.start)
        cost = float(np.vdot(self.start, self.start).real)
        count = len(self.unknown)
        score, information = np.zeros(count), np.zeros((count, count))
        lined = np.zeros((count * components, *x.shape[1:]), np.complex64)
        for begin in range(0, len(self.data), BATCH):
            where = np.arange(begin, min(begin + BATCH, len(self.data)))
            columns, rest = self._columns(where, values, x)
            heavy = columns * weight[where]
            flat = columns.reshape(count, -1)
            information += 2 * (heavy.reshape(count, -1).conj() @ flat.T).real
            score += 2 * (heavy.reshape(count, -1).conj() @ rest.ravel()).real
            cost += float((weight[where] * np.abs(rest) ** 2).sum(dtype=float))
            many = self._operator(apparatus, table.subset(where), count * components)
            stacked = heavy.transpose(1, 0, 2, 3, 4).reshape(many.sample_shape)
            lined += many.adjoint(stacked)
        many = self._operator(apparatus, table, count * components)
        taken, _ = solver.solve(many, lined, PROJECTED)
        information -= 2 * (lined.reshape(count, -1).conj() @ taken.reshape(count, -1).T).real
        return Evaluation(-cost, score, information, cost / self.data.samples.size)

    def _operator(self, apparatus: Instrument, table: Protocol, components: int) -> GeneralOperator:
        grid = self.data.record.specimen.grid
        noise = self.data.record.noise_sd
        return GeneralOperator(
            GeneralModel.build(grid, apparatus, table, np.eye(components, dtype=complex), noise)
        )

    def _columns(
        self, where: NDArray[np.integer], values: dict[str, float], x: ComplexArray
    ) -> tuple[ComplexArray, ComplexArray]:
        """(∂A/∂θ) x (quantities, shots, components, channels y, x), and y − A x, of some shots."""
        instrument = self.data.record.instrument
        nominal = self.data.protocol.subset(where)
        apparatus, table = described(instrument, nominal, values)

        def images(moved: Protocol) -> ComplexArray:
            return self._operator(apparatus, moved, len(x)).apply(x)

        wave = WaveDerivatives(images, table, self.data.record.specimen.grid)
        columns = [
            wave.along(wave_directions(one, instrument, nominal, values)) for one in self.unknown
        ]
        return np.stack(columns), self.data.samples[where] - images(table)
