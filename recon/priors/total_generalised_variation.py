"""Second-order total generalised variation: piecewise linear maps, with edges.

    R(x) = min over w of  Σ_r ‖∇x − w‖₂ + β Σ_r ‖J w‖₂

∇ as in `recon.priors.total_variation`, w a vector field, J w its nine forward differences (the
Jacobian, not symmetrised). Ramps along z are free too: w's z part lives on the faces between
planes. Source: Bredies, Kunisch & Pock, SIAM J. Imaging Sci. 3:492 (2010), which names the variant
without symmetrisation as well (from memory).

The auxiliary field and the exact step: with M w = (−w, E w), E = βJ, the solver splits
(∇x, 0) + M w. For given targets the best w is w = (1 + EᴴE)⁻¹(∇x − t₁ + Eᴴ t₂), one division in the
lateral frequencies and the eigenvectors along z. What is left for x is
D x = P(∇x, 0), P the projector orthogonal to the range of M, so

    DᴴD = ∇ᴴ (1 − (1 + EᴴE)⁻¹) ∇,

a matrix of nz × nz for each lateral frequency, which fits the blocks: the step stays direct and
exact for (x, w) together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.errors import InputError
from recon.priors.base import Array, Edges, Frame, Shape, Term, group_soft_threshold
from recon.priors.total_variation import Gradient
from recon.symbol import Symbol

FloatArray = NDArray[np.floating]
VALUE_ITERATIONS = 300


@dataclass(frozen=True)
class TotalGeneralisedVariation:
    """Few edges and kinks: piecewise linear maps.

    Attributes
    ----------
    curvature_cost
        β: cost of a change of slope beside that of an edge, lateral voxels.
    joint
        All components share their edges and kinks.
    """

    curvature_cost: float = 2.0
    joint: bool = False

    def __post_init__(self) -> None:
        if not 0 < self.curvature_cost < np.inf:
            raise InputError("curvature_cost must be positive", "total generalised variation")

    def __str__(self) -> str:
        shared = " shared by all components" if self.joint else ""
        return f"piecewise linear with few edges{shared} (total generalised variation)"

    def on(self, frame: Frame) -> TotalGeneralisedVariationTerm:
        """Bind to an unknown."""
        return TotalGeneralisedVariationTerm(frame, self.curvature_cost, self.joint)


class TotalGeneralisedVariationTerm(Term):
    """Images (components, 12, nz, ny, nx): ∇x − w along (z, y, x), then E w, E w_y before E w_z."""

    auxiliary = True
    redundancy = 12

    def __init__(self, frame: Frame, curvature_cost: float, joint: bool) -> None:
        self._gradient = Gradient(frame.shape, frame.voxel)
        self._joint = joint
        nz = frame.shape[1]
        self._planes = _Slopes(frame.shape, frame.voxel, curvature_cost)
        faces = (frame.shape[0], nz - 1, *frame.shape[2:])
        self._faces = _Slopes(faces, frame.voxel, curvature_cost) if nz > 1 else None
        self.symbol = Symbol(0.0, self._normal(nz))

    def analyse(self, x: Array) -> Array:
        return self._image(self._gradient.apply(x), None)

    def image_near(self, x: Array, target: Array) -> Array:
        return self._image(self._gradient.apply(x), target)

    def adjoint(self, u: Array) -> Array:
        return self._gradient.adjoint(u[:, :3] + self._solve(self._pull(u[:, 3:]) - u[:, :3]))

    def value(self, u: Array) -> float:
        """min over w, by Douglas–Rachford; u any image of x."""
        v = self._orthogonal(u)
        state = v.copy()
        for _ in range(VALUE_ITERATIONS):
            near = v + state - self._orthogonal(state)
            state += self.prox(2 * near - state, 0.5) - near
        return self._length(v + state - self._orthogonal(state))

    def prox(self, u: Array, step: float) -> Array:
        out = np.empty_like(u)
        for part in (slice(0, 3), slice(3, None)):
            one = u[:, part]
            if self._joint:
                flat = one.reshape(-1, *one.shape[2:])
                out[:, part] = group_soft_threshold(flat, step).reshape(one.shape)
            else:
                out[:, part] = group_soft_threshold(one, step, axis=1)
        return out

    def _length(self, u: Array) -> float:
        axes = (0, 1) if self._joint else 1
        square = np.abs(u) ** 2
        parts = (square[:, :3], square[:, 3:])
        return float(sum(np.sqrt(part.sum(axes)).sum() for part in parts))

    def _image(self, gradient: Array, target: Array | None) -> Array:
        """(∇x − w, E w) for the w that brings it nearest the target."""
        right = gradient
        if target is not None:
            right = gradient - target[:, :3] + self._pull(target[:, 3:])
        w = self._solve(right)
        return np.concatenate([gradient - w, self._push(w)], axis=1)

    def _orthogonal(self, u: Array) -> Array:
        """u less its part in the range of M."""
        w = self._solve(self._pull(u[:, 3:]) - u[:, :3])
        return np.concatenate([u[:, :3] + w, u[:, 3:] - self._push(w)], axis=1)

    def _push(self, w: Array) -> Array:
        """E w, (components, 9, nz, ny, nx)."""
        components, _, nz, ny, nx = w.shape
        out = np.zeros((components, 9, nz, ny, nx), w.dtype)
        for axis in (1, 2):
            out[:, 3 * axis - 3 : 3 * axis] = self._planes.push(w[:, axis])
        if self._faces is not None:
            out[:, 6:, :-1] = self._faces.push(w[:, 0, :-1])
        return out

    def _pull(self, u: Array) -> Array:
        """Eᴴ u, (components, 3, nz, ny, nx)."""
        components, _, nz, ny, nx = u.shape
        out = np.zeros((components, 3, nz, ny, nx), u.dtype)
        for axis in (1, 2):
            out[:, axis] = self._planes.pull(u[:, 3 * axis - 3 : 3 * axis])
        if self._faces is not None:
            out[:, 0, :-1] = self._faces.pull(u[:, 6:, :-1])
        return out

    def _solve(self, right: Array) -> Array:
        """(1 + EᴴE)⁻¹."""
        w = np.zeros_like(right)
        w[:, 1:] = self._planes.solve(right[:, 1:])
        if self._faces is not None:
            w[:, 0, :-1] = self._faces.solve(right[:, 0, :-1])
        return w

    def _normal(self, nz: int) -> FloatArray:
        lateral = np.asarray(self._gradient.symbol.lateral)
        normal = self._planes.remainder() * lateral
        if self._faces is not None:
            difference = self._gradient.scale[0] * np.diff(np.eye(nz), axis=0)
            along_z = np.einsum(
                "az,abyx,bw->zwyx", difference, self._faces.remainder(), difference, optimize=True
            )
            normal = normal + along_z
        return normal


class _Slopes:
    """E and (1 + EᴴE)⁻¹ for one part of w, (components, planes, ny, nx)."""

    def __init__(self, shape: Shape, voxel: Edges, cost: float) -> None:
        self._gradient = Gradient(shape, voxel)
        self._cost = cost
        symbol = self._gradient.symbol
        axial = np.zeros((shape[1],) * 2) if symbol.axial is None else symbol.axial
        values, self._vectors = np.linalg.eigh(axial)
        self._divisor = 1 + cost**2 * (values[:, None, None] + np.asarray(symbol.lateral))

    def push(self, w: Array) -> Array:
        return self._gradient.apply(w) * w.real.dtype.type(self._cost)

    def pull(self, u: Array) -> Array:
        return self._gradient.adjoint(u) * u.real.dtype.type(self._cost)

    def solve(self, right: Array) -> Array:
        kind = right.real.dtype
        vectors, divisor = self._vectors.astype(kind), self._divisor.astype(kind)
        modes = np.einsum("zm,...zyx->...myx", vectors, right, optimize=True)
        if np.isrealobj(right):
            spectrum = scipy.fft.rfft2(modes)
            spectrum /= divisor[..., : spectrum.shape[-1]]
            modes = scipy.fft.irfft2(spectrum, right.shape[-2:], overwrite_x=True)
        else:
            spectrum = scipy.fft.fft2(modes)
            spectrum /= divisor
            modes = scipy.fft.ifft2(spectrum, overwrite_x=True)
        return np.einsum("zm,...myx->...zyx", vectors, modes, optimize=True)

    def remainder(self) -> FloatArray:
        """1 − (1 + EᴴE)⁻¹ for each lateral frequency, (planes, planes, ny, nx)."""
        vectors = self._vectors
        return np.einsum("zm,myx,wm->zwyx", vectors, 1 - 1 / self._divisor, vectors, optimize=True)
