"""One calibrated number with its standard error."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from recon.errors import InputError


@dataclass(frozen=True)
class Estimate:
    """A quantity of the apparatus as a record tells it, or as it was stated.

    Attributes
    ----------
    name
        What it is, with its unit at the end where it has one.
    unit
        Unit of value and standard error; "1" for a pure number.
    value
        The estimate.
    standard_error
        One standard deviation; 0 for a stated value, infinite for one that the record cannot tell,
        whose value then is nominal, or nominal but for a combination that the record does tell.
    fixed
        Stated by a person, not estimated.

    Raises
    ------
    InputError
        The value is not finite, the standard error is negative or not a number, or a stated value
        carries one.
    """

    name: str
    unit: str
    value: float
    standard_error: float = 0.0
    fixed: bool = False

    def __post_init__(self) -> None:
        if not np.isfinite(self.value):
            raise InputError(f"value {self.value} is not finite", self.name, "state a number")
        if not self.standard_error >= 0:
            raise InputError(
                f"standard error {self.standard_error} must not be negative", self.name
            )
        if self.fixed and self.standard_error != 0:
            raise InputError("a stated value has no standard error", self.name, "leave it at 0")

    @property
    def known(self) -> bool:
        """Stated, or told by the record."""
        return bool(np.isfinite(self.standard_error))

    def __str__(self) -> str:
        unit = "" if self.unit == "1" else f" {self.unit}"
        if self.fixed:
            return f"{self.name} = {self.value:.6g}{unit} (stated)"
        if not self.known:
            return f"{self.name} = {self.value:.6g}{unit} (the record cannot tell)"
        return f"{self.name} = {self.value:.6g} ± {self.standard_error:.2g}{unit}"
