"""Nothing outside a known region: R(x) = 0 if x vanishes there, infinite otherwise."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.priors.base import Array, Frame, Pointwise


@dataclass(frozen=True, eq=False)
class Support:
    """The unknown is zero outside the mask.

    Attributes
    ----------
    inside
        True where something may be, (nz, ny, nx), or (components, nz, ny, nx).
    """

    inside: NDArray[np.bool_]

    def __str__(self) -> str:
        return f"nothing outside {100 * float(np.mean(self.inside)):.0f} % of the volume"

    def on(self, frame: Frame) -> SupportTerm:
        """Bind to an unknown.

        Raises
        ------
        InputError
            The mask has another shape, or is empty.
        """
        inside = np.asarray(self.inside, bool)
        if inside.shape not in (frame.shape, frame.shape[1:]):
            raise InputError(
                f"mask of shape {inside.shape} for an unknown of {frame.shape}", "support"
            )
        if not inside.any():
            raise InputError("the mask is empty", "support", "mark where something may be")
        return SupportTerm(inside)


class SupportTerm(Pointwise):
    """Zero outside."""

    constraint = True

    def __init__(self, inside: NDArray[np.bool_]) -> None:
        self._inside = inside

    def value(self, u: Array) -> float:
        return 0.0 if not np.any(u * ~self._inside) else np.inf

    def prox(self, u: Array, step: Any) -> Array:
        return u * self._inside
