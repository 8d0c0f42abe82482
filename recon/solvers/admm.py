"""Alternating directions with the exact quadratic step.

    x ← (G + Σ Dᵢᴴ P Dᵢ)⁻¹ (b + Σ Dᵢᴴ P (uᵢ − dᵢ))
    vᵢ ← α Dᵢ x + (1 − α) uᵢ
    uᵢ ← prox of λᵢ P⁻¹ Rᵢ at vᵢ + dᵢ
    dᵢ ← dᵢ + vᵢ − uᵢ

P = ρ p(z): one penalty per plane, as planes differ in sensitivity by orders of magnitude; p is a
power of the mean diagonal of G per plane, of geometric mean 1. Terms that couple the planes in
their prox get ρ alone.

Source: Boyd, Parikh, Chu, Peleato & Eckstein, Foundations and Trends in Machine Learning 3:1
(2011), over-relaxation and residual balancing of section 3.4; varying penalties, section 3.4.2.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import reduce
from operator import add
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.priors.base import Term
from recon.solvers.loop import Residuals, relative
from recon.solvers.problem import Problem, Step, Weighted
from recon.symbol import Symbol

Array = NDArray[np.inexact]


@dataclass
class ADMMState:
    """Split variables u, scaled duals d, penalty ρ, and what the residuals need."""

    u: list[Array]
    d: list[Array]
    penalty: float
    iteration: int = 0
    x: Array | None = None
    primal: float = np.inf
    dual: float = np.inf
    _step: Step | None = field(default=None, repr=False)
    _rho: list[Any] = field(default_factory=list, repr=False)

    def copy(self) -> ADMMState:
        """A state that further iterations leave alone."""
        return ADMMState(
            [u.copy() for u in self.u],
            [d.copy() for d in self.d],
            self.penalty,
            self.iteration,
            None if self.x is None else self.x.copy(),
            self.primal,
            self.dual,
            self._step,
            self._rho,
        )


@dataclass(frozen=True)
class ADMM:
    """Settings.

    Attributes
    ----------
    penalty
        ρ at the start, in units of the mean diagonal of G.
    plane_power
        Power of a plane's sensitivity (the root of its diagonal of G) in its penalty; 0 treats
        all planes alike.
    over_relaxation
        α, from 1 to below 2.
    balance_every
        Iterations between adjustments of ρ; 0 keeps it.
    balance_until
        No adjustment after this many iterations, so that convergence is assured.
    imbalance
        Ratio of the residuals beyond which ρ is adjusted.
    """

    penalty: float = 1.0
    plane_power: float = 1.0
    over_relaxation: float = 1.7
    balance_every: int = 5
    balance_until: int = 60
    imbalance: float = 3.0

    def __post_init__(self) -> None:
        if not 1 <= self.over_relaxation < 2:
            raise InputError("over_relaxation must be from 1 to below 2", "ADMM settings")
        if not self.penalty > 0:
            raise InputError("penalty must be positive", "ADMM settings")

    def start(self, problem: Problem, guess: Array | None) -> ADMMState:
        """Zero duals; u from the guess, or from one damped least-squares step."""
        quadratic = problem.quadratic
        state = ADMMState([], [], self.penalty)
        step = self._factorise(problem, state)
        guess = step(quadratic.linear) if guess is None else guess.astype(quadratic.dtype)
        state.u = [part.term.analyse(guess) for part in problem.terms]
        state.d = [np.zeros_like(one) for one in state.u]
        return state

    def advance(self, problem: Problem, state: ADMMState) -> ADMMState:
        """One iteration, in place; terms that allow it are done a few planes at a time."""
        self._prepare(problem, state)
        parts = list(zip(problem.terms, state._rho, strict=True))
        right = problem.quadratic.linear.copy()
        for (part, rho), u, d in zip(parts, state.u, state.d, strict=True):
            for planes in _slabs(part.term, u):
                target = _of(u, planes) - _of(d, planes)
                target *= _rho(rho, planes)
                if planes is None:
                    np.add(right, part.term.adjoint(target), out=right)
                else:
                    part.term.add_adjoint_planes(target, planes, right)
        assert state._step is not None
        state.x = state._step(right, state.x)
        del right
        sums = np.zeros(4)
        for place, (part, rho) in enumerate(parts):
            u, d = state.u[place], state.d[place]
            for planes in _slabs(part.term, u):
                near = _of(u, planes), _of(d, planes)
                one, other, norms = self._split(part, _rho(rho, planes), near, state.x, planes)
                if planes is None:
                    state.u[place], state.d[place] = one, other
                else:
                    u[..., planes, :, :], d[..., planes, :, :] = one, other
                sums += norms
        scale, primal, dual, dual_scale = np.sqrt(sums)
        state.iteration += 1
        state.primal = relative(primal, scale)
        state.dual = relative(dual, max(dual, dual_scale))
        return state

    def _split(
        self,
        part: Weighted,
        rho: Any,
        near: tuple[Array, Array],
        x: Array,
        planes: slice | None,
    ) -> tuple[Array, Array, NDArray[np.floating]]:
        """New u and d of a term in some planes (None: all), and what they add to the norms."""
        before, d = near
        if part.term.auxiliary:
            image = part.term.image_near(x, before - d)
        elif planes is None:
            image = part.term.analyse(x)
        else:
            image = part.term.analyse_planes(x, planes)
        relaxed = x.real.dtype.type(self.over_relaxation) * image
        relaxed += x.real.dtype.type(1 - self.over_relaxation) * before
        relaxed += d
        u = part.term.prox(relaxed, part.weight / rho)
        relaxed -= u
        size = max(_squared(image, rho), _squared(u, rho))
        off = np.subtract(image, u, out=None if part.term.tight else image)
        primal = _squared(off, rho)
        moved = np.subtract(u, before, out=off)
        norms = np.array([size, primal, _squared(moved, rho), _squared(relaxed, rho)])
        return u, relaxed, norms

    def residuals(self, problem: Problem, state: ADMMState) -> Residuals:
        """‖Dx − u‖ over ‖u‖, and ‖u − u_before‖ over ‖d‖, in the norm weighted by P."""
        return Residuals(state.primal, state.dual)

    def estimate(self, problem: Problem, state: ADMMState) -> Array:
        """Dᴴu of the last term with DᴴD = 1 (feasible, or sparse), else x."""
        for part, u in zip(reversed(problem.terms), reversed(state.u), strict=True):
            if part.term.tight:
                return part.term.adjoint(u)
        assert state.x is not None
        return state.x

    def _prepare(self, problem: Problem, state: ADMMState) -> None:
        """Adjust ρ where the residuals are out of balance, and (re)build the exact step."""
        due = self.balance_every and state.iteration % self.balance_every == 0
        if due and 0 < state.iteration <= self.balance_until and np.isfinite(state.primal):
            ratio = relative(state.primal, max(state.dual, 1e-12))
            if ratio > self.imbalance or ratio < 1 / self.imbalance:
                factor = float(np.clip(np.sqrt(ratio), 0.1, 10))
                state.penalty *= factor
                state.d = [d / d.real.dtype.type(factor) for d in state.d]
                state._step = None
        if state._step is None:
            self._factorise(problem, state)

    def _factorise(self, problem: Problem, state: ADMMState) -> Step:
        """(G + Σ Dᵢᴴ P Dᵢ)⁻¹, and P for every term: a number, or (nz, 1, 1)."""
        quadratic = problem.quadratic
        kind = np.empty(0, quadratic.dtype).real.dtype
        sensitivity = np.sqrt(np.maximum(quadratic.diagonal().mean(axis=0), 1e-30))
        profile = (sensitivity / np.exp(np.log(sensitivity).mean())) ** self.plane_power
        planes = state.penalty * profile
        symbols: list[Symbol] = []
        state._rho = []
        for part in problem.terms:
            weighted = part.term.weighted(planes)
            symbols.append(part.term.symbol.scaled(state.penalty) if weighted is None else weighted)
            rho: Any = kind.type(state.penalty)
            state._rho.append(rho if weighted is None else planes.astype(kind)[:, None, None])
        state._step = quadratic.step(reduce(add, symbols))
        return state._step


SLAB_BYTES = 1 << 18


def _slabs(term: Term, u: Array) -> Iterator[slice | None]:
    """A few planes at a time, as many as fit `SLAB_BYTES`; None for all at once."""
    if not term.by_planes:
        yield None
        return
    planes = u.shape[-3]
    together = max(1, SLAB_BYTES // (u.nbytes // planes))
    for start in range(0, planes, together):
        yield slice(start, min(start + together, planes))


def _of(u: Array, planes: slice | None) -> Array:
    return u if planes is None else u[..., planes, :, :]


def _rho(rho: Any, planes: slice | None) -> Any:
    return rho if planes is None or np.ndim(rho) == 0 else rho[planes]


def _squared(values: Array, rho: Any) -> float:
    """‖values‖² in the norm weighted by ρ, a number or one per plane."""
    if np.ndim(rho) == 0:
        return float(rho * np.vdot(values, values).real)
    flat = values.reshape(-1, len(rho), values.shape[-1] * values.shape[-2])
    return float((np.vecdot(flat, flat).real @ rho.ravel()).sum())
