"""Keep the state of a solver in a file, and go on from it another day.

Everything that decides the next iteration is kept: arrays as HDF5 datasets, numbers as
attributes. What can be worked out again (the factorised step) is not. In one thread the resumed
run gives the same bits as an unbroken one.
"""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import Any, TypeVar

import h5py
import numpy as np

from recon.errors import InputError
from recon.solvers.admm import ADMMState
from recon.solvers.conjugate_gradients import CGState
from recon.solvers.primal_dual import PrimalDualState
from recon.solvers.proximal_gradient import ProximalGradientState
from recon.store import open_store, read_dataset, read_text, write_store

KIND = "solver-state"
STATES = {
    state.__name__: state for state in (ADMMState, CGState, PrimalDualState, ProximalGradientState)
}
State = TypeVar("State")


def save_state(path: Path | str, state: Any) -> None:
    """Write a solver's state; an existing file is replaced only when the new one is whole.

    Raises
    ------
    InputError
        The state is of an unknown kind, or the file cannot be written.
    """
    name = type(state).__name__
    if STATES.get(name) is not type(state):
        raise InputError(f"a {name} cannot be kept", "checkpoint")
    with write_store(path, KIND) as file:
        file.create_dataset("state", data=name, dtype=h5py.string_dtype())
        for field in _kept(type(state)):
            _write(file, field, getattr(state, field))


def load_state(path: Path | str, kind: type[State]) -> State:
    """Read what `save_state` wrote.

    Raises
    ------
    InputError
        The file is damaged, or holds another solver's state.
    """
    where = str(path)
    with open_store(path, KIND) as file:
        name = read_text(file, "state", where)
        if STATES.get(name) is not kind:
            raise InputError(f"holds a {name}, not a {kind.__name__}", where)
        values = {field: _read(file, field, where) for field in _kept(kind)}
    return kind(**values)


def _kept(kind: type) -> list[str]:
    """Fields that decide the next iteration: all but what is worked out again."""
    fields = dataclasses.fields(kind)
    return [one.name for one in fields if one.repr]


def _write(file: h5py.File, name: str, value: Any) -> None:
    if isinstance(value, list):
        group = file.create_group(name)
        for place, one in enumerate(value):
            group.create_dataset(str(place), data=one)
    elif isinstance(value, np.ndarray):
        file.create_dataset(name, data=value)
    elif value is not None:
        file.attrs[name] = value


def _read(file: h5py.File, name: str, where: str) -> Any:
    if name in file.attrs:
        return file.attrs[name].item()
    node = file.get(name)
    if isinstance(node, h5py.Group):
        return [read_dataset(node, str(place), where)[()] for place in range(len(node))]
    return None if node is None else read_dataset(file, name, where)[()]
