"""Whether amounts found directly and amounts found by way of a cube agree, and if not, why.

Both come from the same noise. If one estimate is efficient its error is uncorrelated with its
difference from another, so the difference has the variance s_larger² − s_smaller² (Hausman,
Econometrica 46:1251, 1978). Neither is efficient under a prior, so the spread is not taken below
`LEAST` of the larger error.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.quantify.assumptions import Refusal, refused
from recon.quantify.fitted import Fitted
from recon.quantify.limits import labels
from recon.quantify.patterns import Pattern
from recon.result import Cube, SpeciesMaps

FloatArray = NDArray[np.floating]

LEAST = 0.3
APART = 4.0
"""Differences, r.m.s. in their standard errors, beyond which two sets of maps disagree; less than
that is what two priors remove from one object."""
MISFIT = 1.1
"""Misfit of the maps, in units of the noise variance, that the noise does not explain."""

NEARLY = 0.8
"""Share of the worst refusal's gain from which another is named beside it."""


@dataclass(frozen=True, eq=False)
class Agreement:
    """Species maps against a fitted cube.

    Attributes
    ----------
    names
        Of the species in both.
    z
        Fitted less direct amounts in standard errors of the difference, (species, nz, ny, nx).
    spread
        r.m.s. of z per species over voxels in which either amount can be read (all, if none).
    offset_mM
        Mean difference there.
    refusals
        What the cube refuses of the assumed lines, the worst first.
    misfit
        Of the direct maps to the record, in units of the noise variance.
    """

    names: tuple[str, ...]
    z: FloatArray
    spread: tuple[float, ...]
    offset_mM: tuple[float, ...]  # noqa: N815
    refusals: tuple[Refusal, ...]
    misfit: float

    @property
    def compatible(self) -> bool:
        """No species is far apart, and no assumption is refused."""
        return max(self.spread) <= APART and not self.refusals

    @property
    def failed_assumption(self) -> str:
        """In words; empty if the two agree."""
        if self.refusals:
            return in_words(self.refusals)
        if self.compatible:
            return ""
        return "none of the lines' assumptions is refused: the priors differ in what they remove"

    def remarks(self) -> tuple[str, ...]:
        """Lines for a result's account."""
        told = ", ".join(
            f"{name} {spread:.2g}" for name, spread in zip(self.names, self.spread, strict=True)
        )
        how = f"fitted and direct amounts differ by {told} standard errors of the difference"
        if self.compatible:
            return (f"{how}: compatible",)
        lines = [f"{how}: not compatible; failed assumption: {self.failed_assumption}"]
        if self.misfit > MISFIT:
            lines.append(
                f"the direct maps leave {self.misfit:.3g} times the noise variance in the record"
            )
        return tuple(lines)


def compare(
    maps: SpeciesMaps,
    fitted: Fitted,
    cube: Cube | None = None,
    patterns: Sequence[Pattern] = (),
) -> Agreement:
    """Compare amounts of one record; with the cube and its patterns, test the lines as well.

    Raises
    ------
    InputError
        Other grids, no species in common, or maps without standard errors.
    """
    if maps.values.shape[1:] != fitted.amounts.shape[1:]:
        raise InputError(
            f"maps on {maps.values.shape[1:]}, fit on {fitted.amounts.shape[1:]} voxels",
            "comparison",
            "take both from one record",
        )
    if maps.standard_error is None:
        raise InputError("the maps have no standard errors", "comparison", "draw replicas")
    names = tuple(name for name in fitted.names if name in maps.names)
    if not names:
        raise InputError("no species in common", "comparison")
    readable = labels(fitted).readable
    scores, spreads, offsets = [], [], []
    for name in names:
        here, there = fitted.names.index(name), maps.names.index(name)
        error = maps.standard_error[there].astype(float)
        difference = fitted.amounts[here].astype(float) - maps.values[there]
        z = difference / _spread(fitted.standard_error[here].astype(float), error)
        seen = readable[here] | (maps.values[there] > 3 * error)
        seen &= np.isfinite(z)
        seen = seen if seen.any() else np.isfinite(z)
        scores.append(z)
        spreads.append(float(np.sqrt((z[seen] ** 2).mean())))
        offsets.append(float(difference[seen].mean()))
    told = refused(cube, patterns) if cube is not None and patterns else []
    return Agreement(
        names, np.stack(scores), tuple(spreads), tuple(offsets), tuple(told), maps.account.misfit
    )


def in_words(refusals: Sequence[Refusal]) -> str:
    """The worst refusal, and the others that explain the data nearly as well."""
    worst = refusals[0]
    near = [str(one) for one in refusals[1:] if one.gain > NEARLY * worst.gain]
    return str(worst) + (f"; nearly as well: {'; '.join(near)}" if near else "")


def _spread(one: FloatArray, other: FloatArray) -> FloatArray:
    """Standard error of the difference of two estimates that share their noise."""
    larger = np.maximum(one, other)
    variance = np.abs(one**2 - other**2)
    return np.sqrt(np.maximum(np.maximum(variance, (LEAST * larger) ** 2), 1e-60))
