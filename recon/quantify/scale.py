"""The absolute scale of amounts, and its error."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.quantify.fitted import Fitted

FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class CalibratedResponse:
    """The response is known to a relative standard error; amounts stay as they are."""

    relative_error: float = 0.0

    def __post_init__(self) -> None:
        if not 0 <= self.relative_error < 1:
            raise InputError("relative_error must lie from 0 to below 1", "scale")

    def apply(
        self, names: Sequence[str], amounts: FloatArray, error: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Amounts and standard errors (species, nz, ny, nx) with the scale's error carried."""
        return amounts, np.sqrt(error**2 + (amounts * self.relative_error) ** 2)

    def on(self, fitted: Fitted) -> Fitted:
        """The fit with the scale's error in its standard errors; a blank has none of it."""
        amounts, error = self.apply(fitted.names, fitted.amounts, fitted.standard_error)
        return replace(fitted, amounts=amounts, standard_error=error)


@dataclass(frozen=True)
class ReferenceSpecies:
    """A species of known amount (such as tissue water) sets the scale.

    The factor is the known amount over the mean found in voxels where it stands at least ten
    standard errors above zero; its error joins the stated relative error.
    """

    name: str
    amount_mM: float  # noqa: N815
    relative_error: float = 0.0

    def __post_init__(self) -> None:
        if not self.amount_mM > 0:
            raise InputError("amount_mM must be positive", "reference species")

    def apply(
        self, names: Sequence[str], amounts: FloatArray, error: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Amounts and standard errors (species, nz, ny, nx), rescaled."""
        factor, relative = self.factor(names, amounts, error)
        scaled = amounts * factor
        return scaled, np.sqrt((error * factor) ** 2 + (scaled * relative) ** 2)

    def on(self, fitted: Fitted) -> Fitted:
        """The fit rescaled, the scale's error in its standard errors."""
        factor, _ = self.factor(fitted.names, fitted.amounts, fitted.standard_error)
        amounts, error = self.apply(fitted.names, fitted.amounts, fitted.standard_error)
        blank = fitted.blank_error * factor
        return replace(fitted, amounts=amounts, standard_error=error, blank_error=blank)

    def factor(
        self, names: Sequence[str], amounts: FloatArray, error: FloatArray
    ) -> tuple[np.float32, float]:
        """What amounts are multiplied by, and its relative error."""
        if self.name not in names:
            raise InputError(f"'{self.name}' was not fitted", "reference species")
        place = list(names).index(self.name)
        found, spread = amounts[place], error[place]
        good = found > 10 * spread
        if not good.any():
            raise InputError(
                f"'{self.name}' is nowhere ten standard errors high", "reference species"
            )
        weight = 1 / np.maximum(spread[good], 1e-30) ** 2
        mean = float((weight * found[good]).sum() / weight.sum())
        relative = np.hypot(self.relative_error, 1 / (mean * np.sqrt(weight.sum())))
        return np.float32(self.amount_mM / mean), float(relative)
