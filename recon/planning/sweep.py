"""What if: the bound over any two numbers of the descriptions."""

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
    """A number of the instrument or of a species, and the values it takes.

    `name` is the path in the description: `instrument.sensor_layer.depth_um`,
    `species.lactate.polarisation`.
    """

    name: str
    values: tuple[float, ...]

    def __post_init__(self) -> None:
        if not self.values or not np.isfinite(self.values).all():
            raise InputError("needs finite values", f"dial '{self.name}'")
        if self.name.split(".")[0] not in ("instrument", "species") or "." not in self.name:
            raise InputError(
                f"'{self.name}' names no number",
                "sweep",
                "begin with 'instrument.' or 'species.<name>.'",
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

    def turned(self, experiment: Experiment, value: float) -> Experiment:
        """The experiment with this number replaced.

        Raises
        ------
        InputError
            The description has no such number, or refuses the value.
        """
        kind, *path = self.name.split(".")
        if kind == "instrument":
            data = experiment.instrument.model_dump(exclude_none=True)
            _set(data, path, value, self.name)
            return replace(experiment, instrument=validated(Instrument, data, self.name))
        names = [one.name for one in experiment.species]
        if path[0] not in names or len(path) < 2:
            raise InputError(
                f"unknown species '{path[0]}'", self.name, f"known: {', '.join(names)}"
            )
        place = names.index(path[0])
        data = experiment.species[place].model_dump(exclude_none=True)
        _set(data, path[1:], value, self.name, missing=("polarisation",))
        changed = list(experiment.species)
        changed[place] = validated(Species, data, self.name)
        return replace(experiment, species=tuple(changed))


def _set(
    data: dict[str, Any], path: list[str], value: float, name: str, missing: tuple[str, ...] = ()
) -> None:
    for part in path[:-1]:
        if not isinstance(data.get(part), dict):
            raise InputError(f"there is no '{part}'", name)
        data = data[part]
    last = path[-1]
    old = data.get(last)
    if last not in data and last not in missing:
        raise InputError(f"there is no '{last}'", name, f"known: {', '.join(data)}")
    if isinstance(old, list | tuple):
        raise InputError("is a list of numbers", name, "sweep a single number")
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
            changed = second.turned(first.turned(experiment, one), two)
            table[row, column] = Bound.of(changed, protocol).detection_limit()[species, depth]
            if progress is not None:
                progress(row * len(second.values) + column + 1, table.size)
    return table
