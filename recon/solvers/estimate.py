"""What an estimator gives, whatever it is made of."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from recon.forward.blocks import BlockQuadratic
from recon.priors.base import Frame
from recon.solvers.loop import History, Reason

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Estimate:
    """An unknown with its error and how it was found; see `recon.result.Account` for the fields."""

    x: Array
    reason: Reason
    misfit: float
    weights: Mapping[str, float] = field(default_factory=dict)
    standard_error: FloatArray | None = None
    resolution: FloatArray | None = None
    history: History = field(default_factory=History)
    remarks: tuple[str, ...] = ()

    def in_units(self, unit: FloatArray) -> Estimate:
        """The same with every component multiplied by its unit, (components,)."""
        factor = np.asarray(unit, np.float32)[:, None, None, None]
        error = None if self.standard_error is None else self.standard_error * factor
        return replace(self, x=self.x * factor, standard_error=error)


Progress = Callable[[str, float | None], None]
"""Called with what is being done, and how much of it is done from 0 to 1 where that is known."""


def silent(what: str, share: float | None) -> None:
    """No progress shown."""


class Estimator(Protocol):
    """Settings of a way to estimate."""

    def estimate(
        self, quadratic: BlockQuadratic, frame: Frame, progress: Progress = ...
    ) -> Estimate:
        """Estimate the unknown of a data term scaled to unit sensitivity."""

    def __str__(self) -> str:
        """What is assumed about the object, in words."""
