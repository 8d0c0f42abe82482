"""What a prior is to a solver.

A prior is a convex function R(D x) of a linear map of the unknown. The settings (`Prior`) know no
size; bound to the shape of an unknown they become a `Term`, which a solver uses through five
methods. Unknowns are real or complex arrays (components, nz, ny, nx) scaled to unit sensitivity.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from recon.symbol import IDENTITY, Symbol

Array = NDArray[np.inexact]
Shape = tuple[int, int, int, int]
Edges = tuple[float, float, float]


@dataclass(frozen=True, eq=False)
class Frame:
    """What a prior must know of the unknown.

    Attributes
    ----------
    shape
        (components, nz, ny, nx).
    voxel
        Voxel edges (dz, dy, dx), metres.
    unit
        Size of one scaled unit of each component in its own unit (mM for amounts), (components,).
    """

    shape: Shape
    voxel: Edges
    unit: NDArray[np.floating]


class Term(ABC):
    """A prior bound to one unknown.

    Attributes
    ----------
    symbol
        DᴴD.
    constraint
        R is 0 or infinite: the weight means nothing.
    auxiliary
        R is itself a minimum over an auxiliary field; see `image_near`.
    redundancy
        Size of D x over that of x.
    by_planes
        D and the prox can be done for a few planes at a time; see `analyse_planes`.
    """

    symbol: Symbol = IDENTITY
    constraint: bool = False
    auxiliary: bool = False
    redundancy: int = 1
    by_planes: bool = False

    @property
    def tight(self) -> bool:
        """DᴴD is the identity, so that Dᴴ u is an estimate in its own right."""
        lateral = self.symbol.lateral
        return self.symbol.axial is None and bool(np.ndim(lateral) == 0 and lateral == 1)

    @abstractmethod
    def analyse(self, x: Array) -> Array:
        """D x."""

    def analyse_planes(self, x: Array, planes: slice) -> Array:
        """The planes of D x, which lie along its last but two axes."""
        return self.analyse(x)[..., planes, :, :]

    def add_adjoint_planes(self, u: Array, planes: slice, total: Array) -> None:
        """Add Dᴴ of an image that holds `u` in some planes and nothing elsewhere."""
        whole = np.zeros((*u.shape[:-3], total.shape[-3], *u.shape[-2:]), u.dtype)
        whole[..., planes, :, :] = u
        np.add(total, self.adjoint(whole), out=total)

    def image_near(self, x: Array, target: Array) -> Array:
        """D x; with an auxiliary field, the image of x under the field nearest the target."""
        return self.analyse(x)

    @abstractmethod
    def adjoint(self, u: Array) -> Array:
        """Dᴴ u."""

    @abstractmethod
    def value(self, u: Array) -> float:
        """R(u)."""

    @abstractmethod
    def prox(self, u: Array, step: Any) -> Array:
        """argmin over v of ½‖v − u‖² + step · R(v).

        Where `weighted` gives a symbol, the step may differ between planes, (nz, 1, 1): then
        ½ Σ_z |v_z − u_z|² / step_z + R(v).
        """

    def weighted(self, planes: NDArray[np.floating]) -> Symbol | None:
        """Dᴴ P D for weights P of the planes (nz,); None if the prox knows one step for all."""
        return None


class Pointwise(Term):
    """A term on the unknown itself: D is the identity. Its prox may differ between planes."""

    def weighted(self, planes: NDArray[np.floating]) -> Symbol | None:
        return Symbol(planes[:, None, None])

    def analyse(self, x: Array) -> Array:
        return x

    def adjoint(self, u: Array) -> Array:
        return u

    def add_adjoint_planes(self, u: Array, planes: slice, total: Array) -> None:
        np.add(total[:, planes], u, out=total[:, planes])


class Prior(Protocol):
    """Settings of a prior."""

    def on(self, frame: Frame) -> Term:
        """Bind to one unknown."""

    def __str__(self) -> str:
        """What is assumed, in words."""


def soft_threshold(u: Array, threshold: Any) -> Array:
    """u · max(0, 1 − threshold/|u|): the prox of threshold · |u|, for real or complex u."""
    if np.isrealobj(u):
        return u - np.clip(u, -threshold, threshold)
    size = np.abs(u)
    np.maximum(size, np.finfo(size.dtype).tiny, out=size)
    np.divide(threshold, size, out=size)
    np.subtract(1, size, out=size)
    np.maximum(size, 0, out=size)
    return u * size


def group_soft_threshold(u: Array, threshold: Any, axis: int = 0) -> Array:
    """Shrink vectors along an axis by their Euclidean length: the prox of threshold · ‖u‖₂."""
    parts = np.moveaxis(u, axis, 0)
    length = np.zeros(parts.shape[1:], u.real.dtype)
    for part in parts:
        length += part.real**2
        if np.iscomplexobj(part):
            length += part.imag**2
    np.sqrt(length, out=length)
    np.maximum(length, np.finfo(length.dtype).tiny, out=length)
    factor = np.maximum(1 - threshold / length, 0, dtype=length.dtype)
    return u * np.expand_dims(factor, axis)
