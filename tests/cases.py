"""A registry of small experiments: every kind of detector, gradient, axis and basis."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np

from recon.forward import ForwardModel
from recon.grid import Grid
from recon.instrument import Instrument
from recon.protocol import Protocol

GRID = Grid((3, 4, 6), (1.5e-6, 2e-6, 1e-6), base_height=0.2e-6)
NOISE = 2e-10


def instrument(
    kind: str = "camera", grid: Grid = GRID, pixel_um: float | None = None, **changes
) -> Instrument:
    """A small sensor whose view spans the grid."""
    _, ny, nx = grid.shape
    view = (nx * grid.voxel[2] * 1e6, ny * grid.voxel[1] * 1e6)
    description = {
        "temperature_C": 25.0,
        "bias_field_mT": (30.0, 30.0, 30.0),
        "sensor_layer": {"depth_um": 0.1, "thickness_um": 0.8, "crystal_cut": "100"},
        "optics": {"numerical_aperture": 0.5, "wavelength_nm": 700.0},
        "gradients": {
            "nuclear_strength_mT_per_m": 1e5,
            "nuclear_pulse_max_ms": 100.0,
            "sensor_strength_mT_per_m": 1e5,
            "sensor_pulse_max_us": 100.0,
        },
        "readout": {
            "photons_per_readout": 1e5,
            "contrast": 0.1,
            "sensing_time_us": 10.0,
            "efficiency": 0.6,
            "readouts_per_sample": 100,
        },
    }
    if kind == "camera":
        description["camera"] = {
            "pixel_um": pixel_um or grid.voxel[2] * 1e6,
            "field_of_view_um": view,
        }
    else:
        description["one_detector"] = {"field_of_view_um": view}
    return Instrument.model_validate(description | changes)


@dataclass(frozen=True)
class Case:
    """One experiment, ready for the operator and for the dense matrix."""

    name: str
    grid: Grid
    instrument: Instrument
    protocol: Protocol
    basis: np.ndarray

    @property
    def model(self) -> ForwardModel:
        return ForwardModel.build(self.grid, self.instrument, self.protocol, self.basis, NOISE)


def protocol(
    grid: Grid, nuclear: bool, sensor: bool, axes: tuple[int, ...], shots: int = 5, seed: int = 1
) -> Protocol:
    """Random lattice wavevectors, axial ones too, with complex amplitudes and averages."""
    rng = np.random.default_rng(seed)
    step_y, step_x = grid.lattice_step
    _, ny, nx = grid.shape
    k = np.zeros((shots, 3))
    q = np.zeros((shots, 2))
    if nuclear:
        k[:, 0] = rng.integers(-(nx // 2), nx // 2 + 1, shots) * step_x
        k[:, 1] = rng.integers(-(ny // 2), ny // 2 + 1, shots) * step_y
        k[:, 2] = rng.uniform(-1e6, 1e6, shots)
    if sensor:
        q[:, 0] = rng.integers(-(nx // 2) + 1, nx // 2, shots) * step_x
        q[:, 1] = rng.integers(-(ny // 2) + 1, ny // 2, shots) * step_y
    return Protocol(
        nuclear_wavevector=k,
        sensor_wavevector=q,
        sensing_axis=np.resize(axes, shots),
        amplitude=rng.uniform(0.5, 1, shots) * np.exp(1j * rng.uniform(-1, 1, shots)),
        averages=rng.integers(1, 4, shots),
        clock_time=np.arange(shots) * 1.0,
        sample_times=np.arange(4) * 5e-3,
    )


BASES = {
    "decays": np.exp(-np.outer(np.arange(4), [0.1 + 0.8j, 0.3 - 0.5j])) * [1e-3, 2e-3],
    "identity": np.eye(4, dtype=complex),
}
DETECTORS = {
    "camera": (GRID, {"kind": "camera", "pixel_um": 2.0}),
    "fine camera": (Grid((3, 4, 6), (1.5e-6, 1e-6, 1e-6)), {"kind": "camera"}),
    "odd camera": (Grid((2, 5, 3), (1e-6, 1e-6, 1e-6)), {"kind": "camera"}),
    "coarse camera": (Grid((2, 4, 6), (1e-6, 1e-6, 1e-6)), {"kind": "camera", "pixel_um": 2.0}),
    "one detector": (GRID, {"kind": "one"}),
}


def registry() -> list[Case]:
    """All combinations of detector, gradients, axes, and both spectral bases."""
    cases = []
    for (detector, (grid, how)), nuclear, sensor, axes in product(
        DETECTORS.items(), (False, True), (False, True), ((1,), (2, 4, 3, 1))
    ):
        for basis_name, basis in BASES.items():
            name = (
                f"{detector}, {'nuclear ' * nuclear}{'sensor ' * sensor}axes {axes}, {basis_name}"
            )
            cases.append(
                Case(
                    name,
                    grid,
                    instrument(grid=grid, **how),
                    protocol(grid, nuclear, sensor, axes),
                    basis,
                )
            )
    return cases
