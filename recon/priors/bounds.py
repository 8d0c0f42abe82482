"""Bounds on a real unknown: R(x) = 0 within them, infinite outside."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.priors.base import Array, Frame, Pointwise

FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Box:
    """lowest ≤ x ≤ highest, in the unknown's own unit (mM for amounts)."""

    lowest: float = 0.0
    highest: float = np.inf

    def __post_init__(self) -> None:
        if not self.lowest <= self.highest:
            raise InputError(f"{self.lowest:g} exceeds {self.highest:g}", "bounds")

    def __str__(self) -> str:
        if self.highest == np.inf:
            return "non-negative" if self.lowest == 0 else f"at least {self.lowest:g}"
        return f"between {self.lowest:g} and {self.highest:g}"

    def on(self, frame: Frame) -> BoxTerm:
        """Bind to an unknown."""
        unit = frame.unit[:, None, None, None]
        return BoxTerm(self.lowest / unit, self.highest / unit)


@dataclass(frozen=True)
class NonNegative(Box):
    """x ≥ 0."""


class BoxTerm(Pointwise):
    """Clipping."""

    constraint = True

    def __init__(self, lowest: FloatArray, highest: FloatArray) -> None:
        self._lowest, self._highest = lowest, highest

    def value(self, u: Array) -> float:
        within = (self._lowest <= u).all() and (u <= self._highest).all()
        return 0.0 if within else np.inf

    def prox(self, u: Array, step: Any) -> Array:
        if np.iscomplexobj(u):
            raise InputError("bounds need a real unknown", "bounds", "leave them out of cube mode")
        return np.clip(u, np.asarray(self._lowest, u.dtype), np.asarray(self._highest, u.dtype))
