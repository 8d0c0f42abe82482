"""What the page shows, as plain JSON facts and float32 arrays."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.errors import InputError
from recon.figures import style
from recon.grid import Grid
from recon.handover.labels import MEANING, readability
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.result import Cube, SpeciesMaps
from recon.specimen import Species

FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Content:
    """One result and where it comes from.

    Attributes
    ----------
    maps, cube
        Of the same record, on the same grid.
    species
        Lines of the maps' species, in their order.
    instrument, protocol
        Of the record.
    truth
        True amounts in mM (species, nz, ny, nx) where there are any (a simulation), or None.
    title
        Heading of the page.
    notes
        Where the specimen comes from: invented, measured, assumed.
    """

    maps: SpeciesMaps
    cube: Cube
    species: Sequence[Species]
    instrument: Instrument
    protocol: Protocol
    truth: FloatArray | None = None
    title: str = "Slice on a sensor"
    notes: str = ""

    def __post_init__(self) -> None:
        if self.maps.grid != self.cube.grid:
            raise InputError("maps and cube lie on different grids", "report")
        if tuple(one.name for one in self.species) != self.maps.names:
            raise InputError("species and maps differ", "report", "give them in the same order")
        if self.truth is not None and self.truth.shape != self.maps.values.shape:
            raise InputError(f"truth has shape {self.truth.shape}", "report")
        if self.maps.standard_error is None or self.cube.standard_error is None:
            raise InputError("the results have no standard errors", "report", "draw replicas")

    def shapes(self) -> FloatArray:
        """Real spectrum of 1 mM of each species on the cube's axis, (species, frequencies)."""
        courses = species_basis(self.species, self.instrument, self.protocol)
        one_voxel = Grid((1, 1, 1), self.cube.grid.voxel)
        spectra = []
        for course in courses.T:
            values = course.reshape(-1, 1, 1, 1).astype(np.complex64)
            line = replace(self.cube, grid=one_voxel, values=values, standard_error=None)
            spectra.append(line.spectrum()[1][:, 0, 0, 0].real)
        return np.stack(spectra)

    def facts(self) -> dict[str, Any]:
        """Everything but the arrays."""
        grid, account = self.maps.grid, self.maps.account
        ppm, _ = self.cube.spectrum()
        return {
            "title": self.title,
            "notes": self.notes,
            "shape": list(grid.shape),
            "voxel_um": [edge * 1e6 for edge in grid.voxel],
            "heights_um": (grid.heights * 1e6).tolist(),
            "layer_um": [self.instrument.depth * 1e6, self.instrument.thickness * 1e6],
            "names": list(self.maps.names),
            "lines_ppm": [one.shift_ppm for one in self.species],
            "ppm": ppm.tolist(),
            "truth": self.truth is not None,
            "amount_colours": _colours(style.AMOUNTS),
            "error_colours": _colours(style.ERRORS),
            "label_meaning": {str(int(k)): text for k, text in MEANING.items()},
            "believe": believable(self.maps, self.truth),
            "remarks": [*account.remarks],
            "measured": self._measured(),
            "done": self._done(),
        }

    def arrays(self) -> dict[str, str]:
        """Base64 of little-endian float32 arrays, and of the labels as bytes."""
        _, spectrum = self.cube.spectrum()
        error = self.cube.standard_error
        assert error is not None
        assert self.maps.standard_error is not None
        spread = self.cube.dwell * np.sqrt((error.astype(float) ** 2).sum(axis=0) / 2)
        packed = {
            "values": _packed(self.maps.values),
            "errors": _packed(self.maps.standard_error),
            "spectrum": _packed(spectrum.real),
            "spread": _packed(spread),
            "shapes": _packed(self.shapes()),
            "labels": base64.b64encode(readability(self.maps).tobytes()).decode(),
        }
        return packed | ({"truth": _packed(self.truth)} if self.truth is not None else {})

    def _measured(self) -> list[list[str]]:
        instrument, protocol, grid = self.instrument, self.protocol, self.maps.grid
        nz, ny, nx = grid.shape
        dz, dy, dx = (edge * 1e6 for edge in grid.voxel)
        field = float(np.linalg.norm(instrument.bias_field)) * 1e3
        depth, thickness = instrument.depth * 1e6, instrument.thickness * 1e6
        rows, columns = instrument.detector.channels()
        full = ny * nx / len(protocol)
        times = protocol.sample_times * 1e3
        return [
            ["Slice", f"{nx} × {ny} × {nz} voxels of {dx:g} × {dy:g} × {dz:g} µm (x, y, z)"],
            ["Sensor layer", f"from {depth:g} to {depth + thickness:g} µm below the face"],
            ["Channels", f"{columns} × {rows}"],
            [
                "Bias field",
                f"{field:.4g} mT; protons at {instrument.larmor_frequency / 1e6:.4g} MHz",
            ],
            ["Noise", f"{instrument.field_noise * 1e9:.3g} nT per sample, channel and average"],
            ["Shots", f"{len(protocol)}, {full:.3g} times fewer than full phase encoding"],
            ["Samples", f"{len(times)} per shot, {times[0]:g} to {times[-1]:g} ms"],
        ]

    def _done(self) -> list[list[str]]:
        account = self.maps.account
        weights = ", ".join(f"{value:.3g}" for value in account.weights.values())
        return [
            ["Assumed", account.prior],
            ["Weight", f"{weights}, from the noise alone"],
            ["Stopped", account.why_stopped],
            ["Misfit", f"{account.misfit:.4f} of the noise variance (1: the noise explains it)"],
            ["Cube", f"{self.cube.account.prior}; misfit {self.cube.account.misfit:.4f}"],
            *[[name, str(value)] for name, value in _traces(account.provenance)],
        ]


def believable(maps: SpeciesMaps, truth: FloatArray | None) -> list[dict[str, Any]]:
    """Per species and plane: r.m.s. standard error, share of readable voxels, true error."""
    assert maps.standard_error is not None
    labels = readability(maps)
    rows = []
    for place, name in enumerate(maps.names):
        error = np.sqrt((maps.standard_error[place].astype(float) ** 2).mean(axis=(1, 2)))
        readable = np.isin(labels[place], (1, 2)).mean(axis=(1, 2))
        row: dict[str, Any] = {
            "name": name,
            "error_mM": error.tolist(),
            "readable": readable.tolist(),
        }
        if truth is not None:
            off = maps.values[place].astype(float) - truth[place]
            row["true_error_mM"] = np.sqrt((off**2).mean(axis=(1, 2))).tolist()
        rows.append(row)
    return rows


def _traces(provenance: Any) -> list[tuple[str, Any]]:
    versions = provenance.get("versions", {})
    told = [("Versions", ", ".join(f"{name} {text}" for name, text in versions.items()))]
    for what in ("record", "protocol"):
        digest = provenance.get(f"{what}_sha256")
        told += [(f"{what.capitalize()} digest", str(digest)[:16])] if digest else []
    told += [("Date", provenance["date"])] if "date" in provenance else []
    return told


def _packed(values: NDArray[Any]) -> str:
    if not np.isfinite(values).all():
        raise InputError("a value is not finite", "report")
    return base64.b64encode(np.ascontiguousarray(values, "<f4").tobytes()).decode()


def _colours(colours: Any) -> list[list[int]]:
    return (np.asarray(colours(np.linspace(0, 1, 256)))[:, :3] * 255).round().astype(int).tolist()
