"""The table of species: shifts, couplings and diffusion of molecules, one TOML file each.

A species is a set of *groups*; a group is a set of spins that couple among themselves only, and
occurs `copies` times in the molecule. Every number names its source, a key of `[sources]`:

    name = "lactate"
    reference = "DSS"
    temperature_C = 37.0

    [sources]
    memory = "from memory"

    [diffusion]
    value_um2_per_ms = 0.16
    temperature_C = 37.0
    medium = "inside cells"
    source = "memory"

    [[groups]]
    name = "lactate"
    spins = [
      { name = "H2", shift_ppm = 4.0974, source = "memory" },
      { name = "CH3", count = 3, shift_ppm = 1.3142, source = "memory" },
    ]
    couplings = [{ between = ["H2", "CH3"], J_Hz = 6.933, source = "memory" }]

`count` joins magnetically equivalent nuclei under one name. The table that ships is in
`recon/data/species`; `datasets/README.md` tells how to add to it.
"""

# ruff: noqa: N815 (unit symbols in field names keep their case)

from __future__ import annotations

from collections.abc import Iterator, Mapping
from difflib import get_close_matches
from functools import cache
from pathlib import Path
from types import MappingProxyType
from typing import Annotated, Literal, Self, TypeVar

import numpy as np
from numpy.typing import NDArray
from pydantic import AfterValidator, Field, model_validator

from recon.errors import InputError
from recon.physics.spins import LineList, SpinSystem, line_list
from recon.toml import Count, Description, Number

Item = TypeVar("Item")


def _plain_name(name: str) -> str:
    if not name or "/" in name or name != name.strip() or not name.isprintable():
        raise ValueError("must be one printable line without '/' or outer blanks")
    return name


def _not_blank(text: str) -> str:
    if not text.strip():
        raise ValueError("must not be blank")
    return text


def _not_empty(items: tuple[Item, ...]) -> tuple[Item, ...]:
    if not items:
        raise ValueError("needs at least one entry")
    return items


Name = Annotated[str, AfterValidator(_plain_name)]
Text = Annotated[str, AfterValidator(_not_blank)]
Positive = Annotated[Number, Field(gt=0)]
PositiveCount = Annotated[Count, Field(ge=1)]
Celsius = Annotated[Number, Field(gt=-273.15)]

BUILT_IN = Path(__file__).parent / "data" / "species"
"""The folder of the species that ship with the program."""


class SpinRow(Description):
    """One spin, or `count` magnetically equivalent ones; a proton needs its shift.

    `shift_slope_ppm_per_K` moves the shift with temperature from the species' `temperature_C`.
    """

    name: Name
    nucleus: Literal["1H", "13C", "15N", "19F", "31P"] = "1H"
    count: PositiveCount = 1
    shift_ppm: Number | None = None
    shift_slope_ppm_per_K: Number = 0.0
    t2_ms: Positive | None = None
    source: Text

    @model_validator(mode="after")
    def _proton_has_a_shift(self) -> Self:
        if self.nucleus == "1H" and self.shift_ppm is None:
            raise ValueError(f"spin {self.name} needs shift_ppm")
        return self


class CouplingRow(Description):
    """The scalar coupling between two spins of one group."""

    between: tuple[Name, Name]
    J_Hz: Number
    source: Text


class SpinGroup(Description):
    """Spins that couple among themselves; `copies` of the group make up the molecule's share."""

    name: Name
    copies: PositiveCount = 1
    spins: Annotated[tuple[SpinRow, ...], AfterValidator(_not_empty)]
    couplings: tuple[CouplingRow, ...] = ()

    @model_validator(mode="after")
    def _makes_a_spin_system(self) -> Self:
        try:
            self.system()
        except InputError as error:
            raise ValueError(f"group {self.name}: {error}") from None
        return self

    @property
    def protons(self) -> int:
        """Protons of all copies."""
        return self.copies * sum(row.count for row in self.spins if row.nucleus == "1H")

    def system(self, warming: float = 0.0) -> SpinSystem:
        """One copy's spin system, `warming` kelvin above the temperature of the table."""
        return SpinSystem(
            tuple(row.name for row in self.spins),
            np.array(
                [(row.shift_ppm or 0.0) + row.shift_slope_ppm_per_K * warming for row in self.spins]
            ),
            self._coupling_table(),
            np.array([row.count for row in self.spins]),
            tuple(row.nucleus for row in self.spins),
            np.array([np.inf if row.t2_ms is None else row.t2_ms / 1e3 for row in self.spins]),
        )

    def _coupling_table(self) -> NDArray[np.float64]:
        """Couplings in Hz, (K, K); a pair given once fills both entries."""
        names = [row.name for row in self.spins]
        given: dict[tuple[int, int], float] = {}
        for row in self.couplings:
            first, second = (_place_of(name, names) for name in row.between)
            if (first, second) in given:
                raise InputError(f"{row.between[0]}–{row.between[1]} is given twice", "couplings")
            given[first, second] = row.J_Hz
        table = np.zeros((len(names), len(names)))
        for (first, second), value in given.items():
            table[first, second] = value
            table[second, first] = given.get((second, first), value)
        return table


class Diffusion(Description):
    """A diffusion coefficient and where it holds."""

    value_um2_per_ms: Positive
    temperature_C: Celsius
    medium: Text
    source: Text


class SpinSpecies(Description):
    """One molecule of the table; amounts of it are amounts of molecules."""

    name: Name
    title: Text | None = None
    reference: Literal["DSS", "TMSP", "TMS"]
    temperature_C: Celsius
    pH: Annotated[Number, Field(gt=0, lt=14)] | None = None
    notes: str = ""
    sources: dict[str, Text]
    diffusion: Diffusion
    groups: Annotated[tuple[SpinGroup, ...], AfterValidator(_not_empty)]

    @model_validator(mode="after")
    def _names_and_sources(self) -> Self:
        names = [group.name for group in self.groups]
        for name in names:
            if names.count(name) > 1:
                raise ValueError(f"two groups are called {name}")
        used = dict(self._sources_used())
        for place, key in used.items():
            if key not in self.sources:
                raise ValueError(f"{place}: source '{key}' is not listed under [sources]")
        for key in self.sources:
            if key not in used.values():
                raise ValueError(f"source '{key}' is listed but no number names it")
        return self

    def _sources_used(self) -> Iterator[tuple[str, str]]:
        yield "diffusion", self.diffusion.source
        for group in self.groups:
            for spin in group.spins:
                yield f"group {group.name}, spin {spin.name}", spin.source
            for row in group.couplings:
                yield f"group {group.name}, coupling {'–'.join(row.between)}", row.source

    @property
    def protons(self) -> int:
        """Protons of one molecule that the table describes: the sum of all intensities."""
        return sum(group.protons for group in self.groups)

    @property
    def diffusion_coefficient(self) -> float:
        """Diffusion coefficient, m²/s."""
        return self.diffusion.value_um2_per_ms * 1e-9

    def group_lines(
        self,
        larmor_frequency: float,
        reference_shift_ppm: float = 4.70,
        *,
        temperature_C: float | None = None,
        dropped_fraction: float = 1e-6,
    ) -> dict[str, LineList]:
        """Line list of each group, all copies together, by the group's name.

        Parameters are those of `recon.physics.spins.line_list`; without `temperature_C` the
        shifts hold at the temperature of the table.
        """
        warming = 0.0 if temperature_C is None else temperature_C - self.temperature_C
        return {
            group.name: line_list(
                group.system(warming), larmor_frequency, reference_shift_ppm, dropped_fraction
            ).scaled(group.copies)
            for group in self.groups
        }

    def lines(
        self,
        larmor_frequency: float,
        reference_shift_ppm: float = 4.70,
        *,
        temperature_C: float | None = None,
        dropped_fraction: float = 1e-6,
    ) -> LineList:
        """Line list of the molecule; the intensities add up to `protons`."""
        groups = self.group_lines(
            larmor_frequency,
            reference_shift_ppm,
            temperature_C=temperature_C,
            dropped_fraction=dropped_fraction,
        )
        return LineList.joined(list(groups.values()))


def load_species_folder(folder: Path | str) -> dict[str, SpinSpecies]:
    """Every species of a folder's `*.toml` files, by name.

    Raises
    ------
    InputError
        A faulty file, no file at all, or one name in two files.
    """
    table: dict[str, SpinSpecies] = {}
    for path in sorted(Path(folder).glob("*.toml")):
        species = SpinSpecies.from_toml(path)
        if species.name in table:
            raise InputError(f"a second species is called {species.name}", str(path))
        table[species.name] = species
    if not table:
        raise InputError("holds no species (*.toml)", str(folder))
    return table


@cache
def built_in_species() -> Mapping[str, SpinSpecies]:
    """The species that ship with the program, by name."""
    return MappingProxyType(load_species_folder(BUILT_IN))


def species_named(name: str, table: Mapping[str, SpinSpecies] | None = None) -> SpinSpecies:
    """The species called `name` in a table, by default the built-in one.

    Raises
    ------
    InputError
        No such species; the nearest name is suggested.
    """
    known = built_in_species() if table is None else table
    if name not in known:
        raise InputError(f"unknown species '{name}'", "species table", _suggestion(name, [*known]))
    return known[name]


def _place_of(name: str, names: list[str]) -> int:
    if name not in names:
        raise InputError(f"unknown spin '{name}'", "couplings", _suggestion(name, names))
    return names.index(name)


def _suggestion(name: str, names: list[str]) -> str:
    close = get_close_matches(name, names, 1)
    return f"did you mean '{close[0]}'?" if close else f"known: {', '.join(names)}"
