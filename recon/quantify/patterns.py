"""What the spectrum of a voxel is made of: one or more time courses per species, and a baseline."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.basis import magnetisation_per_mM, time_course
from recon.errors import InputError
from recon.instrument import Instrument
from recon.result import Cube
from recon.specimen import Species

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]

BLENDED = 100.0
"""Condition number of two patterns above which they cannot be told apart in practice."""


@dataclass(frozen=True, eq=False)
class Pattern:
    """One species: the time courses of its parts in A/m per mM, (times, parts).

    With several parts their composition is free; the amount is their sum.
    """

    name: str
    courses: ComplexArray

    def __post_init__(self) -> None:
        if self.courses.ndim != 2 or not np.isfinite(self.courses).all():
            raise InputError("needs finite courses (times, parts)", f"pattern '{self.name}'")


@dataclass(frozen=True)
class Baseline:
    """Broad signal: complex amplitudes of quickly decaying courses at the reference shift.

    decay_ms: decay times; short against those of the species.
    """

    decay_ms: tuple[float, ...] = ()

    def __post_init__(self) -> None:
        if not all(time > 0 for time in self.decay_ms):
            raise InputError("decay_ms must be positive", "baseline")

    def courses(self, times: FloatArray) -> ComplexArray:
        """(times, decays)."""
        decays = np.asarray(self.decay_ms, float) * 1e-3
        return np.exp(-np.outer(times, 1 / decays)).astype(complex)


def patterns_of(species: Sequence[Species], instrument: Instrument, cube: Cube) -> list[Pattern]:
    """One pattern per species; species called `name: part` share the pattern `name`."""
    scale = magnetisation_per_mM(species, instrument)
    groups: dict[str, list[ComplexArray]] = {}
    for one, size in zip(species, scale, strict=True):
        course = time_course(one, instrument, cube.sample_times, cube.reference_shift_ppm) * size
        groups.setdefault(one.name.split(":")[0].strip(), []).append(course)
    return [Pattern(name, np.stack(parts, axis=1)) for name, parts in groups.items()]


def worst_pair(patterns: Sequence[Pattern]) -> tuple[str, str, float]:
    """The two patterns that are hardest to tell apart, and the condition of their pair."""
    unit = [p.courses.sum(axis=1) / np.linalg.norm(p.courses.sum(axis=1)) for p in patterns]
    worst = ("", "", 1.0)
    for first in range(len(unit)):
        for second in range(first + 1, len(unit)):
            likeness = abs(float(np.vdot(unit[first], unit[second]).real))
            condition = np.sqrt((1 + likeness) / max(1 - likeness, 1e-300))
            if condition > worst[2]:
                worst = (patterns[first].name, patterns[second].name, float(condition))
    return worst


def check_distinct(patterns: Sequence[Pattern], most: float = BLENDED) -> None:
    """Refuse patterns that cannot be told apart.

    Raises
    ------
    InputError
        Names the pair and its condition number.
    """
    first, second, condition = worst_pair(patterns)
    if condition > most:
        raise InputError(
            f"'{first}' and '{second}' cannot be told apart at this field and these times "
            f"(condition {condition:.3g})",
            "patterns",
            "leave one out, join them as 'name: part', or sample longer",
        )
