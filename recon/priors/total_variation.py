"""Isotropic total variation in three dimensions, with the voxels' own sizes.

R(x) = Σ_r ‖∇x(r)‖₂, the gradient by forward differences over the edge of the voxel in units of
the lateral edge: periodic across the plane (as the FFT is) and free at the lowest and highest
planes. DᴴD is |e^{iκ}−1|² laterally plus a tridiagonal matrix along z, which fits the blocks.
Source: Rudin, Osher & Fatemi, Physica D 60:259 (1992).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.priors.base import Array, Edges, Frame, Shape, Term, group_soft_threshold
from recon.symbol import Symbol


@dataclass(frozen=True)
class TotalVariation:
    """Few edges: piecewise constant maps.

    Attributes
    ----------
    joint
        All components share their edges: one norm over the gradients of all of them.
    """

    joint: bool = False

    def __str__(self) -> str:
        shared = " shared by all components" if self.joint else ""
        return f"piecewise constant with few edges{shared} (total variation)"

    def on(self, frame: Frame) -> TotalVariationTerm:
        """Bind to an unknown."""
        return TotalVariationTerm(frame, self.joint)


class Gradient:
    """∇: (c, nz, ny, nx) to (c, 3, nz, ny, nx), differences along z, y, x over relative edges."""

    def __init__(self, shape: Shape, voxel: Edges) -> None:
        unit = np.sqrt(voxel[1] * voxel[2])
        self.scale = tuple(unit / edge for edge in voxel)
        nz = shape[1]
        self.symbol = Symbol(self._lateral(shape), self._axial(nz) if nz > 1 else None)

    def apply(self, x: Array) -> Array:
        return self.apply_planes(x, slice(0, x.shape[1]))

    def apply_planes(self, x: Array, planes: slice) -> Array:
        """∇x in some planes, (c, 3, planes, ny, nx)."""
        here = x[:, planes]
        above = x[:, planes.start + 1 : planes.stop + 1]
        u = np.empty((len(x), 3, *here.shape[1:]), x.dtype)
        inside = above.shape[1]
        np.subtract(above, here[:, :inside], out=u[:, 0, :inside])
        u[:, 0, inside:] = 0
        np.subtract(here[:, :, 1:], here[:, :, :-1], out=u[:, 1, :, :-1])
        np.subtract(here[:, :, 0], here[:, :, -1], out=u[:, 1, :, -1])
        np.subtract(here[..., 1:], here[..., :-1], out=u[:, 2, ..., :-1])
        np.subtract(here[..., 0], here[..., -1], out=u[:, 2, ..., -1])
        for axis in range(3):
            if self.scale[axis] != 1:
                u[:, axis] *= x.real.dtype.type(self.scale[axis])
        return u

    def adjoint(self, u: Array) -> Array:
        x = np.zeros((len(u), *u.shape[2:]), u.dtype)
        self.add_adjoint(u, slice(0, u.shape[2]), x)
        return x

    def add_adjoint(self, u: Array, planes: slice, total: Array) -> None:
        """Add ∇ᴴ of an image that holds `u` in some planes to (c, nz, ny, nx)."""
        here = total[:, planes]
        above = total[:, planes.start + 1 : planes.stop + 1]
        for axis in range(3):
            part = u[:, axis]
            if self.scale[axis] != 1:
                part = part * u.real.dtype.type(self.scale[axis])
            if axis == 0:
                inside = above.shape[1]
                _take(here[:, :inside], part[:, :inside])
                _put(above, part[:, :inside])
                continue
            _take(here, part)
            turned, into = (np.moveaxis(one, axis + 1, 0) for one in (part, here))
            _put(into[1:], turned[:-1])
            _put(into[0], turned[-1])

    def weighted(self, planes: NDArray[np.floating]) -> Symbol:
        """∇ᴴ P ∇ for weights of the planes."""
        lateral = planes[:, None, None] * np.asarray(self.symbol.lateral)
        if len(planes) == 1:
            return Symbol(lateral)
        difference = self.scale[0] * np.diff(np.eye(len(planes)), axis=0)
        return Symbol(lateral, difference.T @ (planes[:-1, None] * difference))

    def _lateral(self, shape: Shape) -> np.ndarray:
        parts = [
            (2 * scale * np.sin(np.pi * np.fft.fftfreq(n))) ** 2
            for scale, n in zip(self.scale[1:], shape[2:], strict=True)
        ]
        return parts[0][:, None] + parts[1]

    def _axial(self, nz: int) -> np.ndarray:
        difference = self.scale[0] * np.diff(np.eye(nz), axis=0)
        return difference.T @ difference


def _put(into: Array, values: Array) -> None:
    np.add(into, values, out=into)


def _take(into: Array, values: Array) -> None:
    np.subtract(into, values, out=into)


class TotalVariationTerm(Term):
    """∇ and the sum of its lengths."""

    redundancy = 3
    by_planes = True

    def __init__(self, frame: Frame, joint: bool) -> None:
        self._gradient = Gradient(frame.shape, frame.voxel)
        self._joint = joint
        self.symbol = self._gradient.symbol

    def analyse(self, x: Array) -> Array:
        return self._gradient.apply(x)

    def analyse_planes(self, x: Array, planes: slice) -> Array:
        return self._gradient.apply_planes(x, planes)

    def add_adjoint_planes(self, u: Array, planes: slice, total: Array) -> None:
        self._gradient.add_adjoint(u, planes, total)

    def adjoint(self, u: Array) -> Array:
        return self._gradient.adjoint(u)

    def weighted(self, planes: NDArray[np.floating]) -> Symbol:
        return self._gradient.weighted(planes)

    def value(self, u: Array) -> float:
        axes = (0, 1) if self._joint else 1
        return float(np.sqrt((np.abs(u) ** 2).sum(axes)).sum())

    def prox(self, u: Array, step: Any) -> Array:
        if not self._joint:
            return group_soft_threshold(u, step, axis=1)
        together = u.reshape(-1, *u.shape[2:])
        return group_soft_threshold(together, step).reshape(u.shape)
