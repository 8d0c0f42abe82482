"""What the sample is: a voxel grid, its species, and their concentration maps.

A specimen is a TOML file beside an HDF5 file with one map per species in mM:

    notes = "invented"
    maps = "muscle.h5"

    [grid]
    shape = [6, 64, 64]
    voxel_um = [4.0, 4.0, 4.0]
    base_height_um = 0.0

    [[species]]
    name = "lactate"
    shift_ppm = 1.33
    equivalent_nuclei = 3
    t2_star_ms = 120.0
    t1_s = 1.5
    diffusion_um2_per_ms = 0.2

Shapes and voxel edges run (z, y, x). Maps may be finer than the grid by whole factors.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from functools import cached_property
from pathlib import Path
from typing import Annotated, Any, Literal, cast

import h5py
import numpy as np
from numpy.typing import NDArray
from pydantic import Field, field_validator

from recon.errors import InputError
from recon.files import atomic_path
from recon.grid import Grid
from recon.store import open_store, read_dataset, reading, write_store
from recon.toml import Count, Description, Number, read_toml, toml_text, validated

MAPS_KIND = "concentration-maps"

Maps = NDArray[np.float32]
Positive = Annotated[Number, Field(gt=0)]
PositiveCount = Annotated[Count, Field(ge=1)]


class Species(Description):
    """One line of one molecule, or all lines of a spin system.

    `equivalent_nuclei` is the number of nuclei of one molecule in this line; without
    `polarisation` the nuclei are at thermal equilibrium. `spin_system` names an entry of the
    species table, or a species file of one's own ending in .toml: its exact lines at the actual
    field take the place of the one at `shift_ppm`, which then only labels the species.
    """

    name: Annotated[str, Field(min_length=1, max_length=60)]
    shift_ppm: Number
    equivalent_nuclei: PositiveCount
    t2_star_ms: Positive
    t1_s: Positive
    diffusion_um2_per_ms: Annotated[Number, Field(ge=0)]
    polarisation: Annotated[Number, Field(ge=0, le=1)] | None = None
    nucleus: Literal["1H"] = "1H"
    spin_system: Annotated[str, Field(min_length=1)] | None = None

    @field_validator("name")
    @classmethod
    def _name_for_files(cls, name: str) -> str:
        if "/" in name or name != name.strip() or not name.isprintable() or name.startswith("."):
            raise ValueError(
                "must be one printable line without '/', outer blanks or a leading dot"
            )
        return name

    @property
    def t2_star(self) -> float:
        """Effective transverse relaxation time, seconds."""
        return self.t2_star_ms / 1e3

    @property
    def t1(self) -> float:
        """Longitudinal relaxation time, seconds."""
        return self.t1_s

    @property
    def diffusion(self) -> float:
        """Diffusion coefficient, m²/s."""
        return self.diffusion_um2_per_ms / 1e9


class GridDescription(Description):
    """A grid as people write it; counts and edges run (z, y, x)."""

    shape: tuple[PositiveCount, PositiveCount, PositiveCount]
    voxel_um: tuple[Positive, Positive, Positive]
    base_height_um: Annotated[Number, Field(ge=0)] = 0.0

    def grid(self) -> Grid:
        """The grid in metres."""
        dz, dy, dx = self.voxel_um
        return Grid(self.shape, (dz / 1e6, dy / 1e6, dx / 1e6), self.base_height_um / 1e6)

    @classmethod
    def of(cls, grid: Grid) -> GridDescription:
        """Describe a grid; lengths are rounded to twelve digits so that they read well."""
        dz, dy, dx = (_micrometres(edge) for edge in grid.voxel)
        height = _micrometres(grid.base_height)
        return cls(shape=grid.shape, voxel_um=(dz, dy, dx), base_height_um=height)


class SpecimenDescription(Description):
    """The specimen's TOML file."""

    notes: str = ""
    maps: str | None = None
    grid: GridDescription
    species: Annotated[tuple[Species, ...], Field(min_length=1)]


@dataclass(frozen=True, eq=False)
class Specimen:
    """Species on a grid.

    Attributes
    ----------
    grid
        The voxel grid.
    species
        The species, in the order of the maps.
    maps
        Concentrations in mM = mol/m³, float32 (species, nz·rz, ny·ry, nx·rx), or None where only
        the description is known.
    refinement
        Whole factors (rz, ry, rx) by which the maps are finer than the grid.
    notes
        Where the content comes from: invented, measured, assumed.
    """

    grid: Grid
    species: tuple[Species, ...]
    maps: Maps | None = None
    refinement: tuple[int, int, int] = (1, 1, 1)
    notes: str = ""

    def __post_init__(self) -> None:
        object.__setattr__(self, "species", tuple(self.species))
        object.__setattr__(self, "refinement", tuple(int(r) for r in self.refinement))
        if not self.species:
            raise InputError("has no species", "specimen", "give at least one")
        repeated = [name for name in self.names if self.names.count(name) > 1]
        if repeated:
            raise InputError(f"species '{repeated[0]}' is listed twice", "specimen")
        if len(self.refinement) != 3 or min(self.refinement) < 1:
            raise InputError(f"refinement {self.refinement} needs three factors >= 1", "specimen")
        if self.maps is not None:
            object.__setattr__(self, "maps", self._checked(np.asarray(self.maps)))

    def _checked(self, maps: NDArray[Any]) -> Maps:
        fine = tuple(n * r for n, r in zip(self.grid.shape, self.refinement, strict=True))
        if maps.ndim != 4 or maps.shape[1:] != fine:
            raise InputError(
                f"maps have shape {maps.shape}, the grid and its refinement ask for "
                f"({len(self.species)}, {fine[0]}, {fine[1]}, {fine[2]})",
                "specimen",
            )
        if len(maps) < len(self.species):
            raise InputError(f"species '{self.names[len(maps)]}' has no map", "specimen")
        if len(maps) > len(self.species):
            raise InputError(f"{len(maps)} maps for {len(self.species)} species", "specimen")
        for name, one in zip(self.names, maps, strict=True):
            _check_concentrations(name, one)
        view = np.ascontiguousarray(maps, np.float32).view()
        view.flags.writeable = False
        return view

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the species."""
        return tuple(species.name for species in self.species)

    def index(self, name: str) -> int:
        """Position of a species by name."""
        if name not in self.names:
            close = get_close_matches(name, self.names, 1)
            mend = f"did you mean '{close[0]}'?" if close else f"known: {', '.join(self.names)}"
            raise InputError(f"unknown species '{name}'", "specimen", mend)
        return self.names.index(name)

    @cached_property
    def concentrations(self) -> Maps:
        """Block means of the maps on the grid, mM, float32 (species, nz, ny, nx)."""
        if self.maps is None:
            raise InputError(f"species '{self.names[0]}' has no map", "specimen")
        (nz, ny, nx), (rz, ry, rx) = self.grid.shape, self.refinement
        blocks = self.maps.reshape(-1, nz, rz, ny, ry, nx, rx)
        return cast(Maps, blocks.mean(axis=(2, 4, 6), dtype=np.float32))

    def description(self, maps: str | None = None) -> SpecimenDescription:
        """What the TOML file says; `maps` is the name of the file with the maps."""
        grid = GridDescription.of(self.grid)
        return SpecimenDescription(notes=self.notes, maps=maps, grid=grid, species=self.species)

    def description_json(self) -> str:
        """Grid, species and notes as JSON, without the maps."""
        return self.description().to_json()

    @classmethod
    def from_description_json(cls, text: str) -> Specimen:
        """A specimen without maps from `description_json`."""
        description = SpecimenDescription.from_json(text)
        return cls(description.grid.grid(), description.species, notes=description.notes)

    @classmethod
    def from_toml(cls, path: Path | str) -> Specimen:
        """Read the description and, beside it, the maps.

        Raises
        ------
        InputError
            A mistake in the description, a species without a map, a map that does not fit the
            grid, a concentration that is negative or not finite.
        """
        description = validated(SpecimenDescription, read_toml(path), str(path))
        if description.maps is None:
            name = description.species[0].name
            raise InputError(f"species '{name}' has no map", str(path), "add the field 'maps'")
        grid = description.grid.grid()
        file = Path(path).parent / description.maps
        maps, refinement = _read_maps(file, description.species, grid)
        return cls(grid, description.species, maps, refinement, description.notes)

    def save(self, path: Path | str) -> None:
        """Write the TOML file and, beside it, an HDF5 file of the same name with the maps."""
        path = Path(path)
        if path.suffix != ".toml":
            raise InputError("the name must end in .toml", str(path))
        if self.maps is None:
            raise InputError(f"species '{self.names[0]}' has no map", "specimen")
        file = path.with_suffix(".h5")
        data = self.description(file.name).model_dump(mode="json", exclude_none=True)
        with atomic_path(path) as temporary:
            temporary.write_text(toml_text(data), encoding="utf-8")
            _write_maps(file, dict(zip(self.names, self.maps, strict=True)))


def _micrometres(length: float) -> float:
    return float(f"{length * 1e6:.12g}")


def _check_concentrations(name: str, values: NDArray[Any]) -> None:
    if not np.isfinite(values).all():
        raise InputError("a concentration is not finite", f"map of '{name}'")
    if values.size and values.min() < 0:
        raise InputError(f"a concentration is negative ({values.min():g} mM)", f"map of '{name}'")


def _write_maps(path: Path, maps: Mapping[str, Maps]) -> None:
    with write_store(path, MAPS_KIND) as file:
        group = file.create_group("concentration_mM")
        for name, values in maps.items():
            shape = (1, *values.shape[1:])
            group.create_dataset(
                name,
                data=values,
                chunks=shape,
                compression="gzip",
                compression_opts=1,
                shuffle=True,
            )


def _read_maps(
    path: Path, species: tuple[Species, ...], grid: Grid
) -> tuple[Maps, tuple[int, int, int]]:
    with open_store(path, MAPS_KIND) as file:
        group = file.get("concentration_mM")
        if not isinstance(group, h5py.Group):
            raise InputError("group 'concentration_mM' is missing", str(path))
        for one in species:
            if one.name not in group:
                known = ", ".join(group) or "none"
                raise InputError(f"species '{one.name}' has no map", str(path), f"maps: {known}")
        datasets = [read_dataset(group, one.name, str(path)) for one in species]
        refinement = _refinement(datasets[0].shape, grid, str(path))
        maps = np.empty((len(species), *datasets[0].shape), np.float32)
        for one, dataset, target in zip(species, datasets, maps, strict=True):
            if dataset.shape != datasets[0].shape:
                raise InputError(
                    f"has shape {dataset.shape}, the first map {datasets[0].shape}",
                    f"{path}: map of '{one.name}'",
                )
            with reading(str(path)):
                dataset.read_direct(target)
    return maps, refinement


def _refinement(shape: tuple[int, ...], grid: Grid, where: str) -> tuple[int, int, int]:
    if len(shape) != 3 or any(
        fine % coarse for fine, coarse in zip(shape, grid.shape, strict=True)
    ):
        raise InputError(f"maps of shape {shape} do not divide into the grid {grid.shape}", where)
    rz, ry, rx = (fine // coarse for fine, coarse in zip(shape, grid.shape, strict=True))
    return rz, ry, rx
