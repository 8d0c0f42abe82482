"""What a reconstruction gives: a cube or species maps, with errors and an account of the run.

Arrays run (component, z, y, x). A result is one HDF5 file.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.grid import Grid
from recon.labels import Labels
from recon.specimen import GridDescription
from recon.store import open_store, read_dataset, read_text, store_kind, write_store

FloatArray = NDArray[np.floating]
ComplexArray = NDArray[np.complexfloating]
MAPS = "species-maps"
CUBE = "cube"

AnyResult = TypeVar("AnyResult", bound="Result")


@dataclass(frozen=True)
class Account:
    """How a result came about.

    Attributes
    ----------
    prior
        What was assumed about the object, in words.
    weights
        Weight of each part of the prior, as used, by name.
    why_stopped
        The solver's reason for stopping, in words.
    misfit
        Mean squared data residual in units of the noise variance: 1 when the noise explains it.
    provenance
        Anything that tells where the result comes from (versions, digests, settings, date).
    remarks
        What the reader must know before believing it, one line each.
    """

    prior: str
    weights: Mapping[str, float] = field(default_factory=dict)
    why_stopped: str = ""
    misfit: float = float("nan")
    provenance: Mapping[str, Any] = field(default_factory=dict)
    remarks: tuple[str, ...] = ()

    def to_json(self) -> str:
        """The account as JSON."""
        return json.dumps(self.__dict__, ensure_ascii=False)

    @classmethod
    def from_json(cls, text: str) -> Account:
        """The inverse of `to_json`."""
        facts = json.loads(text)
        return cls(**facts | {"remarks": tuple(facts["remarks"])})


@dataclass(frozen=True, eq=False)
class Result:
    """What both kinds of result share.

    Attributes
    ----------
    grid
        The voxel grid.
    values
        (components, nz, ny, nx).
    standard_error
        Standard error of each value, same shape, or None where it was not computed.
    resolution
        Full width at half maximum of the local point response along (z, y, x) in metres,
        (components, nz, 3), NaN where it is undefined; or None.
    account
        How it came about.
    """

    grid: Grid
    values: NDArray[Any]
    account: Account
    standard_error: FloatArray | None = None
    resolution: FloatArray | None = None

    def __post_init__(self) -> None:
        shape = np.shape(self.values)
        if len(shape) != 4 or shape[1:] != self.grid.shape:
            raise InputError(f"values of shape {shape} on a grid of {self.grid.shape}", "result")
        if self.standard_error is not None and self.standard_error.shape != shape:
            raise InputError(f"errors of shape {self.standard_error.shape}, not {shape}", "result")


@dataclass(frozen=True, eq=False)
class SpeciesMaps(Result):
    """Amounts in mM, float32 (species, nz, ny, nx), the species' names, and labels if any."""

    names: tuple[str, ...] = ()
    labels: Labels | None = None

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.labels is not None and self.labels.values.shape != self.values.shape:
            raise InputError(f"labels of shape {self.labels.values.shape}", "result")
        if len(self.names) != len(self.values):
            raise InputError(f"{len(self.values)} maps for {len(self.names)} names", "result")

    def map(self, name: str) -> FloatArray:
        """One species' map (nz, ny, nx), mM."""
        if name not in self.names:
            known = ", ".join(self.names)
            raise InputError(f"no species '{name}'", "result", f"it has: {known}")
        return self.values[self.names.index(name)]

    def save(self, path: Path | str) -> None:
        """Write the maps as one HDF5 file."""
        extra: dict[str, Any] = {"names": list(self.names)}
        if self.labels is not None:
            extra["label_meaning"] = {str(key): text for key, text in self.labels.meaning.items()}
        _save(path, self, MAPS, extra)

    @classmethod
    def load(cls, path: Path | str) -> SpeciesMaps:
        """Read what `save` wrote."""
        parts, extra = _load(path, MAPS)
        if "labels" in parts:
            meaning = {int(key): text for key, text in extra["label_meaning"].items()}
            parts["labels"] = Labels(parts["labels"], meaning)
        return cls(**parts, names=tuple(extra["names"]))


@dataclass(frozen=True, eq=False)
class Cube(Result):
    """Transverse magnetisation in A/m over time, complex64 (times, nz, ny, nx).

    A line at shift δ goes as exp(−i 2π (δ − δ_ref)·1e-6·f t), f the Larmor frequency.

    Attributes
    ----------
    sample_times
        (times,), seconds.
    larmor_frequency
        Hz.
    reference_shift_ppm
        Shift δ_ref of zero frequency, ppm.
    """

    sample_times: FloatArray = field(default_factory=lambda: np.zeros(0))
    larmor_frequency: float = 0.0
    reference_shift_ppm: float = 0.0

    def __post_init__(self) -> None:
        super().__post_init__()
        if len(self.sample_times) != len(self.values):
            raise InputError(f"{len(self.values)} frames, {len(self.sample_times)} times", "result")

    @property
    def dwell(self) -> float:
        """Time between samples, seconds; samples must be evenly spaced."""
        steps = np.diff(self.sample_times)
        if not len(steps) or not np.allclose(steps, steps[0], rtol=1e-6, atol=0):
            raise InputError("sample times are not evenly spaced", "cube", "resample them first")
        return float(steps[0])

    def spectrum(self) -> tuple[FloatArray, ComplexArray]:
        """Ascending ppm axis (f,) and spectrum (f, nz, ny, nx), A/m times seconds.

        S(δ) = Δt Σ_t' M(t) exp(+i 2π (δ − δ_ref)·1e-6·f t), the first sample halved, so that an
        absorption line of decay T2* has height M T2* and no offset.
        """
        dwell, count = self.dwell, len(self.values)
        signal = np.array(self.values, np.complex64)
        signal[0] *= 0.5
        spectral = np.fft.fftshift(np.fft.ifft(signal, axis=0), axes=0) * (count * dwell)
        frequency = np.fft.fftshift(np.fft.fftfreq(count, dwell))
        start = self.sample_times[0]
        if start != 0:
            turn = np.exp(2j * np.pi * frequency * start)
            spectral = spectral * turn[:, None, None, None]
        ppm = self.reference_shift_ppm + frequency / (self.larmor_frequency * 1e-6)
        return ppm, spectral.astype(np.complex64)

    def save(self, path: Path | str) -> None:
        """Write the cube as one HDF5 file."""
        extra = {
            "sample_times_s": np.asarray(self.sample_times).tolist(),
            "larmor_frequency_Hz": self.larmor_frequency,
            "reference_shift_ppm": self.reference_shift_ppm,
        }
        _save(path, self, CUBE, extra)

    @classmethod
    def load(cls, path: Path | str) -> Cube:
        """Read what `save` wrote."""
        parts, extra = _load(path, CUBE)
        return cls(
            **parts,
            sample_times=np.array(extra["sample_times_s"]),
            larmor_frequency=extra["larmor_frequency_Hz"],
            reference_shift_ppm=extra["reference_shift_ppm"],
        )


def load_result(path: Path | str) -> SpeciesMaps | Cube:
    """Read a result of either kind.

    Raises
    ------
    InputError
        The file holds something else.
    """
    return Cube.load(path) if store_kind(path) == CUBE else SpeciesMaps.load(path)


def _save(path: Path | str, result: Result, kind: str, extra: Mapping[str, Any]) -> None:
    with write_store(path, kind) as file:
        file.create_dataset("values", data=result.values)
        for name in ("standard_error", "resolution"):
            if getattr(result, name) is not None:
                file.create_dataset(name, data=getattr(result, name))
        if isinstance(result, SpeciesMaps) and result.labels is not None:
            file.create_dataset("labels", data=result.labels.values, compression="gzip")
        file.create_dataset("grid", data=GridDescription.of(result.grid).to_json())
        file.create_dataset("account", data=result.account.to_json())
        file.create_dataset("extra", data=json.dumps(extra))


def _load(path: Path | str, kind: str) -> tuple[dict[str, Any], dict[str, Any]]:
    where = str(path)
    with open_store(path, kind) as file:
        parts: dict[str, Any] = {
            "grid": GridDescription.from_json(read_text(file, "grid", where)).grid(),
            "values": read_dataset(file, "values", where)[()],
            "account": Account.from_json(read_text(file, "account", where)),
        }
        for name in ("standard_error", "resolution", "labels"):
            if name in file:
                parts[name] = read_dataset(file, name, where)[()]
        return parts, json.loads(read_text(file, "extra", where))
