"""`nearspin show`: what a file holds."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import click
import numpy as np

from recon.cli.reconstruct import summary
from recon.counts.record import CountsRecord, holds_counts
from recon.errors import InputError
from recon.grid import Grid
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.record import Record
from recon.result import CUBE, MAPS, Cube, SpeciesMaps
from recon.specimen import Specimen
from recon.store import store_kind
from recon.toml import read_toml


@click.command("show")
@click.argument("file", type=click.Path(path_type=Path))
def verb(file: Path) -> None:
    """Say what FILE holds: a description, protocol, record or result."""
    click.echo(description(file))


def description(path: Path) -> str:
    """A few lines on any of the program's files.

    Raises
    ------
    InputError
        The file is missing, damaged, or of a kind that is not known here.
    """
    if path.suffix == ".toml":
        holds_specimen = "species" in read_toml(path)
        if holds_specimen:
            return _specimen(Specimen.from_toml(path))
        return _instrument(Instrument.from_toml(path))
    kinds: dict[str, Callable[[Path], str]] = {
        "protocol": lambda p: _protocol(Protocol.load(p)),
        "counts": lambda p: _counts(CountsRecord.open(p)),
        "record": lambda p: _record(Record.open(p)),
        MAPS: lambda p: (
            f"species maps on {_grid(SpeciesMaps.load(p).grid)}\n" + summary(SpeciesMaps.load(p))
        ),
        CUBE: lambda p: _cube(Cube.load(p)),
    }
    kind = "counts" if holds_counts(path) else store_kind(path)
    if kind not in kinds:
        raise InputError(f"holds a {kind}, which has nothing to show", str(path))
    return kinds[kind](path)


def _grid(grid: Grid) -> str:
    (nz, ny, nx), (dz, dy, dx) = grid.shape, (edge * 1e6 for edge in grid.voxel)
    return f"{nz} x {ny} x {nx} voxels of {dz:g} x {dy:g} x {dx:g} µm (z, y, x)"


def _specimen(specimen: Specimen) -> str:
    lines = [f"specimen on {_grid(specimen.grid)}"]
    for species, values in zip(specimen.species, specimen.concentrations, strict=True):
        lines.append(
            f"  {species.name}: {species.shift_ppm:g} ppm, T2* {species.t2_star_ms:g} ms, "
            f"mean {values.mean():.4g} mM, largest {values.max():.4g} mM"
        )
    return "\n".join([*lines, f"  {specimen.notes}"])


def _instrument(instrument: Instrument) -> str:
    channels = instrument.detector.channels()
    field = float(np.linalg.norm(instrument.bias_field)) * 1e3
    return "\n".join(
        [
            f"instrument with {channels[0]} x {channels[1]} channels",
            f"  bias field {field:.4g} mT, proton frequency "
            f"{instrument.larmor_frequency / 1e6:.5g} MHz",
            f"  sensor layer from {instrument.depth * 1e6:g} µm, "
            f"{instrument.thickness * 1e6:g} µm thick",
            f"  field noise {instrument.field_noise * 1e12:.4g} pT per sample and channel",
            f"  largest nuclear wavevector "
            f"{np.round(instrument.nuclear_wavevector_limit * 1e-6, 3).tolist()} rad/µm (x, y, z)",
        ]
    )


def _protocol(protocol: Protocol) -> str:
    k = np.abs(protocol.nuclear_wavevector).max(axis=0) * 1e-6
    q = np.abs(protocol.sensor_wavevector).max(axis=0) * 1e-6
    times = protocol.sample_times
    return "\n".join(
        [
            f"protocol of {len(protocol)} shots, {int(protocol.averages.sum())} with averages",
            f"  largest nuclear wavevector {k.round(3).tolist()} rad/µm (x, y, z)",
            f"  largest sensor wavevector {q.round(3).tolist()} rad/µm (x, y)",
            f"  sensing axes {sorted(set(protocol.sensing_axis.tolist()))}",
            f"  {len(times)} samples from {times[0] * 1e3:g} to {times[-1] * 1e3:g} ms, "
            f"{protocol.spectral_axis.value}",
            f"  digest {protocol.digest()[:16]}",
        ]
    )


def _counts(record: CountsRecord) -> str:
    frames, rows, columns = record.row_shape
    lines = [
        f"photon counts: {len(record)} rows of {frames} frames, {rows} x {columns} channels, "
        f"{record.nbytes / 1e6:.1f} MB of {record.dtype}",
        f"  {len(np.unique(record.shot))} of {len(record.protocol)} shots measured",
    ]
    return "\n".join([*lines, *([f"  {record.cut}"] if record.cut else [])])


def _record(record: Record) -> str:
    shots, times, rows, columns = record.shape
    return "\n".join(
        [
            f"record of {shots} shots, {times} samples, {rows} x {columns} channels, "
            f"{record.nbytes / 1e6:.1f} MB",
            f"  noise {record.noise_sd * 1e12:.4g} pT per sample at one average",
            f"  species: {', '.join(record.specimen.names)}",
            f"  reconstructs on {_grid(record.specimen.grid)}",
        ]
    )


def _cube(cube: Cube) -> str:
    ppm, _ = cube.spectrum()
    return "\n".join(
        [
            f"complex cube on {_grid(cube.grid)}, {len(cube.values)} times",
            f"  {ppm[0]:.3g} to {ppm[-1]:.3g} ppm, {ppm[1] - ppm[0]:.3g} ppm apart, "
            f"{cube.reference_shift_ppm:g} ppm at zero frequency",
            summary(cube),
        ]
    )
