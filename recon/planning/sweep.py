"""What if: the bound over any two numbers of the descriptions.

The table of shots stays as it is; diffusion, which needs the times of pulses, is left to the
verdict.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.instrument import Instrument
from recon.planning.bound import Bound, Experiment
from recon.protocol import Protocol
from recon.specimen import Species
from recon.toml import validated

FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Dial:
    """A number of the descriptions, and the values it takes.

    `name` is one of

    - a path in the instrument or a species: `instrument.sensor_layer.depth_um`,
      `instrument.bias_field_mT.z`, `species.lactate.polarisation`;
    - `grid.voxel_um`: the lateral voxel; view, camera pixels and lateral wavevectors follow, the
      number of voxels stays;
    - `protocol.averages`, of every shot;
    - `expectation.feature_um`, or `readout.noise_gain`.
    """

    name: str
    values: tuple[float, ...]

    def __post_init__(self) -> None:
        if not self.values or not np.isfinite(self.values).all():
            raise InputError("needs finite values", f"dial '{self.name}'")
        known = self.name in OTHERS or self.name.startswith(("instrument.", "species."))
        if not known:
            raise InputError(
                f"'{self.name}' names no number",
                "sweep",
                "begin with 'instrument.' or 'species.<name>.', or use " + ", ".join(OTHERS),
            )

    @classmethod
    def parse(cls, text: str) -> Dial:
        """From `name=1,2,3`."""
        name, _, numbers = text.partition("=")
        try:
            return cls(name.strip(), tuple(float(part) for part in numbers.split(",")))
        except ValueError as error:
            if isinstance(error, InputError):
                raise
            raise InputError(f"'{text}' is not name=number,number,...", "sweep") from error

    def turned(
        self, experiment: Experiment, protocol: Protocol, value: float
    ) -> tuple[Experiment, Protocol]:
        """Experiment and table with this number replaced.

        Raises
        ------
        InputError
            The description has no such number, or refuses the value.
        """
        if self.name in OTHERS:
            return OTHERS[self.name](experiment, protocol, value)
        kind, *path = self.name.split(".")
        if kind == "instrument":
            data = experiment.instrument.model_dump(exclude_none=True)
            _set(data, path, value, self.name)
            changed = validated(Instrument, data, self.name)
            return replace(experiment, instrument=changed), protocol
        names = [one.name for one in experiment.species]
        if path[0] not in names or len(path) < 2:
            raise InputError(
                f"unknown species '{path[0]}'", self.name, f"known: {', '.join(names)}"
            )
        place = names.index(path[0])
        data = experiment.species[place].model_dump(exclude_none=True)
        _set(data, path[1:], value, self.name, missing=("polarisation",))
        species = list(experiment.species)
        species[place] = validated(Species, data, self.name)
        return replace(experiment, species=tuple(species)), protocol


def _averages(
    experiment: Experiment, protocol: Protocol, value: float
) -> tuple[Experiment, Protocol]:
    return experiment, replace(protocol, averages=np.full(len(protocol), value))


def _feature(
    experiment: Experiment, protocol: Protocol, value: float
) -> tuple[Experiment, Protocol]:
    changed = replace(experiment.expectation, feature_um=value)
    return replace(experiment, expectation=changed), protocol


def _noise_gain(
    experiment: Experiment, protocol: Protocol, value: float
) -> tuple[Experiment, Protocol]:
    return replace(experiment, noise_gain=value), protocol


def _voxel(experiment: Experiment, protocol: Protocol, value: float) -> tuple[Experiment, Protocol]:
    """Stretch everything lateral alike."""
    if not value > 0:
        raise InputError(f"voxel of {value:g} µm", "grid.voxel_um", "use a positive number")
    grid = experiment.grid
    if not np.isclose(grid.voxel[1], grid.voxel[2]):
        raise InputError("lateral voxels are not square", "grid.voxel_um")
    factor = value * 1e-6 / grid.voxel[1]
    data = experiment.instrument.model_dump(exclude_none=True)
    detector = data["camera" if "camera" in data else "one_detector"]
    detector["field_of_view_um"] = tuple(factor * v for v in detector["field_of_view_um"])
    if "pixel_um" in detector:
        detector["pixel_um"] *= factor
    nuclear = protocol.nuclear_wavevector / np.array([factor, factor, 1])
    return (
        replace(
            experiment,
            instrument=validated(Instrument, data, "grid.voxel_um"),
            grid=replace(
                grid, voxel=(grid.voxel[0], factor * grid.voxel[1], factor * grid.voxel[2])
            ),
        ),
        replace(
            protocol,
            nuclear_wavevector=nuclear,
            sensor_wavevector=protocol.sensor_wavevector / factor,
        ),
    )


OTHERS: dict[str, Callable[[Experiment, Protocol, float], tuple[Experiment, Protocol]]] = {
    "grid.voxel_um": _voxel,
    "protocol.averages": _averages,
    "expectation.feature_um": _feature,
    "readout.noise_gain": _noise_gain,
}


def _set(
    data: dict[str, Any], path: list[str], value: float, name: str, missing: tuple[str, ...] = ()
) -> None:
    *parents, last = path
    for part in parents:
        inner = data.get(part)
        if isinstance(inner, list | tuple) and last in tuple("xyz"[: len(inner)]):
            data[part] = tuple(
                value if axis == last else old for axis, old in zip("xyz", inner, strict=False)
            )
            return
        if not isinstance(inner, dict):
            raise InputError(f"there is no '{part}'", name)
        data = inner
    old = data.get(last)
    if last not in data and last not in missing:
        raise InputError(f"there is no '{last}'", name, f"known: {', '.join(data)}")
    if isinstance(old, list | tuple):
        raise InputError("is a list of numbers", name, "add .x, .y or .z")
    data[last] = int(value) if isinstance(old, int) and value == int(value) else value


def sweep(
    experiment: Experiment,
    protocol: Protocol,
    first: Dial,
    second: Dial,
    species: int,
    depth: int,
    progress: Callable[[int, int], None] | None = None,
) -> FloatArray:
    """Detection limit in mM of one species in one plane, (first values, second values)."""
    table = np.empty((len(first.values), len(second.values)))
    for row, one in enumerate(first.values):
        for column, two in enumerate(second.values):
            changed, shots = second.turned(*first.turned(experiment, protocol, one), two)
            table[row, column] = Bound.of(changed, shots).detection_limit()[species, depth]
            if progress is not None:
                progress(row * len(second.values) + column + 1, table.size)
    return table
