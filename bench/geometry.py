"""How well and how fast the geometry is told from the demonstration's record (invented muscle).

    python bench/geometry.py --json

The record is simulated with the true geometry and filed under the nominal one: first with a
standoff that is 0.5 µm off, then with nuclear gradients that are 1 to 3 % and 1.5° off as well.
`known` compares it with the specimen's maps averaged to the grid, `unknown` does without.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
import time
from collections.abc import Callable

import numpy as np
from common import emit, table

from recon import demo
from recon.calibrate.ascent import GeometryFit
from recon.calibrate.estimate import Estimate
from recon.calibrate.evidence import standoff_from_record
from recon.calibrate.geometry_fit import geometry_from_sample
from recon.calibrate.geometry_parameters import LATERAL, LAYER, SIGNAL, described
from recon.calibrate.gradients_fit import gradients_from_record
from recon.record import Record
from recon.simulate import simulate
from recon.specimens.muscle import Muscle

STANDOFF = {"depth_um": 0.6}
ANGLE = np.radians(1.5)
TURN = np.array([[np.cos(ANGLE), -np.sin(ANGLE)], [np.sin(ANGLE), np.cos(ANGLE)]])
MATRIX = TURN @ np.array([[1.03, 0.01], [0.01, 0.99]])
GRADIENTS = {
    f"nuclear_matrix_{row}{column}": float(MATRIX[i, j])
    for i, row in enumerate("xy")
    for j, column in enumerate("xy")
}
SAMPLE = (1, 1, 1)
Row = list[object]


def stated(fit: GeometryFit) -> list[Estimate]:
    """What a fit found, as given to the next one."""
    return [Estimate(one.name, one.unit, one.value, fixed=True) for one in fit.estimates]


class Measured:
    """The demonstration's record with another geometry than the one it is filed under."""

    def __init__(self, truth: dict[str, float], seed: int) -> None:
        self.truth, self.rows = truth, list[Row]()
        self.sample = Muscle.small(seed).specimen()
        apparatus = demo.instrument()
        protocol = demo.protocol(self.sample, seed)
        record = simulate(self.sample, *described(apparatus, protocol, truth), seed=seed)
        self.record = Record.from_arrays(
            apparatus,
            protocol,
            record.samples_in_memory(),
            record.description_json,
            noise_sd=record.noise_sd,
        )

    def told(self, how: str, fit: Callable[[], GeometryFit]) -> GeometryFit:
        """Run and keep rows."""
        begin = time.perf_counter()
        found = fit()
        seconds = time.perf_counter() - begin
        for one in found.estimates:
            if one.name in self.truth and not one.fixed:
                error = one.value - self.truth[one.name]
                spread = one.standard_error
                numbers = [f"{x:.5g}" for x in (self.truth[one.name], one.value, error, spread)]
                self.rows.append([how, one.name, *numbers, f"{error / spread:.1f}"])
        self.rows.append([how, "seconds, misfit", f"{seconds:.1f}", f"{found.misfit:.4f}"])
        return found


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="accepted for uniformity")
    parser.add_argument("--seed", type=int, default=0)
    given = parser.parse_args()
    one = Measured(STANDOFF, given.seed)
    one.told("unknown", lambda: standoff_from_record(one.record))
    one.told(
        "known",
        lambda: geometry_from_sample(one.record, one.sample, LAYER[:1] + SIGNAL, refinement=SAMPLE),
    )
    two = Measured(STANDOFF | GRADIENTS, given.seed)
    first = two.told("unknown", lambda: gradients_from_record(two.record))
    two.told("unknown, then", lambda: standoff_from_record(two.record, LAYER[:1], stated(first)))
    two.told(
        "known",
        lambda: geometry_from_sample(
            two.record, two.sample, LAYER[:1] + SIGNAL + LATERAL, refinement=SAMPLE
        ),
    )
    columns = ["sample", "quantity", "truth", "found", "error", "standard error", "in units"]
    rows = [[*row, *[""] * (len(columns) - len(row))] for row in one.rows + two.rows]
    table(rows, columns)
    emit({"bench": "geometry", "seed": given.seed, "rows": rows})


if __name__ == "__main__":
    main()
