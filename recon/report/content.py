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
from recon.handover.labels import Labels
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.result import Cube, SpeciesMaps
from recon.specimen import Species

FloatArray = NDArray[np.floating]
SUSPECT = 1.5
MOST = 32767


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
        rows = believable(self.maps, self.truth)
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
            "label_meaning": {
                str(int(k)): text for k, text in Labels.derived(self.maps).meaning.items()
            },
            "believe": rows,
            "verdict": verdict(rows, self.maps.grid),
            "remarks": [*account.remarks],
            "measured": self._measured(),
            "done": self._done(),
        }

    def arrays(self) -> dict[str, str]:
        """Base64 of little-endian arrays: float32; the spectrum int16 in quanta of its voxel."""
        _, spectrum = self.cube.spectrum()
        error = self.cube.standard_error
        assert error is not None
        assert self.maps.standard_error is not None
        spread = self.cube.dwell * np.sqrt((error.astype(float) ** 2).sum(axis=0) / 2)
        numbers, quantum = quantised(spectrum.real)
        packed = {
            "values": _packed(self.maps.values),
            "errors": _packed(self.maps.standard_error),
            "spectrum": base64.b64encode(numbers.tobytes()).decode(),
            "quantum": _packed(quantum),
            "spread": _packed(spread),
            "shapes": _packed(self.shapes()),
            "labels": base64.b64encode(Labels.derived(self.maps).values.tobytes()).decode(),
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
    """Per species and plane, what can be said of its errors.

    `error_mM`: r.m.s. standard error; `readable`: share of voxels above the detection limit;
    `width_um`: width of a point along (x, y), None where undefined. With a truth also
    `true_error_mM` (r.m.s.), `inside`: share of voxels within two standard errors of it, and
    `off`: whether the true error is more than `SUSPECT` times the standard error.
    """
    assert maps.standard_error is not None
    labels = Labels.derived(maps)
    rows = []
    for place, name in enumerate(maps.names):
        spread = maps.standard_error[place].astype(float)
        error = np.sqrt((spread**2).mean(axis=(1, 2)))
        readable = labels.readable[place].mean(axis=(1, 2))
        row: dict[str, Any] = {
            "name": name,
            "error_mM": error.tolist(),
            "readable": readable.tolist(),
        }
        if maps.resolution is not None:
            widths = maps.resolution[place][:, :0:-1] * 1e6
            row["width_um"] = [
                [float(w) if np.isfinite(w) else None for w in pair] for pair in widths
            ]
        if truth is not None:
            off = maps.values[place].astype(float) - truth[place]
            size = np.sqrt((off**2).mean(axis=(1, 2)))
            row["true_error_mM"] = size.tolist()
            row["inside"] = (np.abs(off) <= 2 * spread).mean(axis=(1, 2)).tolist()
            row["off"] = (size > SUSPECT * error).tolist()
        rows.append(row)
    return rows


def verdict(rows: Sequence[dict[str, Any]], grid: Grid) -> list[str]:
    """Lines that say where a known truth contradicts the standard errors."""
    if "off" not in rows[0]:
        return []
    heights = [f"{height * 1e6:.3g}" for height in grid.heights]
    bad = []
    for row in rows:
        where = [height for height, off in zip(heights, row["off"], strict=True) if off]
        bad += [f"{row['name']} at {', '.join(where)} µm"] if where else []
    if not bad:
        return ["The truth is known here, and the standard errors agree with it in every plane."]
    return [
        f"The truth is known here, and lies further off than {SUSPECT:g} times the standard error "
        f"(marked ▲): {'; '.join(bad)}. The prior does not hold there; do not rely on these errors."
    ]


def quantised(curves: FloatArray) -> tuple[NDArray[np.int16], NDArray[np.float32]]:
    """Curves (f, …) as whole numbers and the size of one (…): within 2e-5 of each curve's peak."""
    if not np.isfinite(curves).all():
        raise InputError("a value is not finite", "report")
    quantum = (np.abs(curves).max(axis=0) / MOST).astype(np.float32)
    safe = np.where(quantum > 0, quantum, 1)
    return np.rint(curves / safe).clip(-MOST, MOST).astype("<i2"), quantum


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
