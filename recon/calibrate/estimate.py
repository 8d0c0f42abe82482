"""A calibrated quantity: its value, how well it is known, and whether it was given."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from recon.errors import InputError


@dataclass(frozen=True)
class Estimate:
    """One number.

    Attributes
    ----------
    name, unit
        What it is.
    value, standard_error
        In that unit.
    fixed
        Given by the user, not fitted; its standard error is 0.
    """

    name: str
    unit: str
    value: float
    standard_error: float
    fixed: bool = False

    def __post_init__(self) -> None:
        if not np.isfinite((self.value, self.standard_error)).all() or self.standard_error < 0:
            raise InputError(f"{self.value} ± {self.standard_error} is no estimate", self.name)
        if self.fixed and self.standard_error:
            raise InputError("a fixed value has no standard error", self.name)

    def __str__(self) -> str:
        if self.fixed:
            return f"{self.name}: {self.value:.5g} {self.unit} (fixed)"
        return f"{self.name}: {self.value:.5g} ± {self.standard_error:.2g} {self.unit}"
