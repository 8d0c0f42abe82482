"""What a level of an image is taken to hold: a table of concentrations, written by hand.

    reading = "grey"            # or "label"
    notes = "levels from a stain for glycogen; contents assumed"

    [[species]]                 # as in a specimen file
    name = "water"
    shift_ppm = 4.70
    ...

    [[level]]
    level = 0
    concentration_mM = { water = 52000.0, lactate = 2.0 }

    [[level]]
    level = 255
    concentration_mM = { water = 42000.0, lactate = 30.0 }

"grey": contents run straight between listed levels and stay at the end values beyond them.
"label": each label of the image must be listed and is looked up as it stands.
Levels are in the image's own units; for a colour image, in optical density (see `image_file`).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from recon.errors import InputError
from recon.specimen import Species
from recon.toml import Description, Number, read_toml, validated

FloatArray = NDArray[np.floating]
Float32Array = NDArray[np.float32]
Amount = Annotated[Number, Field(ge=0)]


@dataclass(frozen=True, eq=False)
class GreyLevels:
    """Contents straight between levels: levels (L,) ascending, contents (L, species) mM."""

    levels: FloatArray
    contents: FloatArray

    def amounts(self, image: NDArray[Any], species: int) -> Float32Array:
        """Concentration of one species at each pixel, mM; end values beyond the table."""
        found = np.interp(image, self.levels, self.contents[:, species])
        return np.asarray(found, np.float32)

    def remark(self, image: NDArray[Any]) -> str:
        """One sentence on levels beyond the table, or nothing."""
        beyond = float(np.mean((image < self.levels[0]) | (image > self.levels[-1])))
        if not beyond:
            return ""
        return f" {100 * beyond:.2g} % of the pixels lie beyond the table and take its end values."


@dataclass(frozen=True, eq=False)
class LabelLevels:
    """Contents looked up label by label: levels (L,) ascending, contents (L, species) mM."""

    levels: FloatArray
    contents: FloatArray

    def amounts(self, image: NDArray[Any], species: int) -> Float32Array:
        """Concentration of one species at each pixel, mM.

        Raises
        ------
        InputError
            The image holds a label that the table does not list.
        """
        place = np.minimum(np.searchsorted(self.levels, image), len(self.levels) - 1)
        unknown = self.levels[place] != image
        if unknown.any():
            label = float(image[unknown][0])
            raise InputError(
                f"label {label:g} of the image is not listed",
                "level table",
                "add it as a [[level]]",
            )
        return np.asarray(self.contents[place, species], np.float32)

    def remark(self, image: NDArray[Any]) -> str:
        """Nothing to remark: every label is listed."""
        return ""


@dataclass(frozen=True)
class LevelTable:
    """Species, and what each level of an image is taken to hold of them."""

    species: tuple[Species, ...]
    levels: GreyLevels | LabelLevels
    notes: str = ""


class LevelDescription(Description):
    """One level and its contents, species name → mM."""

    level: Number
    concentration_mM: dict[str, Amount]  # noqa: N815


class LevelTableDescription(Description):
    """The table's TOML file."""

    reading: Literal["grey", "label"]
    notes: str = ""
    species: Annotated[tuple[Species, ...], Field(min_length=1)]
    level: Annotated[tuple[LevelDescription, ...], Field(min_length=1)]

    def table(self, where: str = "level table") -> LevelTable:
        """The table, ready for lookup.

        Raises
        ------
        InputError
            A level or species listed twice, a level without a concentration for some species, a
            concentration of a species that is not described, or one single grey level.
        """
        names = [one.name for one in self.species]
        _once(names, "species", where)
        _once([f"{one.level:g}" for one in self.level], "level", where)
        rows = sorted(self.level, key=lambda one: one.level)
        for row in rows:
            _same_names(row.concentration_mM, names, f"{where}: level {row.level:g}")
        if self.reading == "grey" and len(rows) < 2:
            raise InputError("a grey table needs two levels or more", where)
        levels = np.array([row.level for row in rows])
        contents = np.array([[row.concentration_mM[name] for name in names] for row in rows])
        kind = GreyLevels if self.reading == "grey" else LabelLevels
        return LevelTable(self.species, kind(levels, contents), self.notes)


def load_level_table(path: Path | str) -> LevelTable:
    """Read a level table from a TOML file; mistakes raise `InputError`, one line each."""
    description = validated(LevelTableDescription, read_toml(path), str(path))
    return description.table(str(path))


def _once(items: Sequence[str], what: str, where: str) -> None:
    twice = [item for item in items if items.count(item) > 1]
    if twice:
        raise InputError(f"{what} '{twice[0]}' is listed twice", where)


def _same_names(found: Mapping[str, float], names: Sequence[str], where: str) -> None:
    missing = [name for name in names if name not in found]
    strange = [name for name in found if name not in names]
    if strange:
        raise InputError(f"species '{strange[0]}' is not described", where, "add a [[species]]")
    if missing:
        raise InputError(f"has no concentration of '{missing[0]}'", where, "give it, if only 0")
