"""The quadratic data term where the blocks are not exact.

    q(x) = ½ ‖W^{1/2}(y − A x)‖²,   G = AᴴWA by a pass over the shots, or by larger blocks

The quadratic step (G + S)⁻¹ r is an object's choice: conjugate gradients with block solves as
preconditioner, or one majorise–minimise update, which keeps the block solve direct.
"""

from __future__ import annotations

from collections.abc import Callable
from copy import copy
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, Protocol

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.sparse.linalg import LinearOperator, eigsh

from recon.errors import InputError
from recon.forward.blocks import BlockQuadratic
from recon.forward.general import GeneralOperator
from recon.forward.general_statistics import GeneralStatistics
from recon.forward.local_information import local_information
from recon.forward.normal import normal_blocks
from recon.forward.operator import ForwardOperator
from recon.forward.statistics import Statistics
from recon.forward.toeplitz import ToeplitzNormal, is_toeplitz
from recon.solvers.conjugate_gradients import System, iterate
from recon.solvers.graded import GradedBlocks
from recon.solvers.loop import Stopping
from recon.solvers.problem import Step
from recon.symbol import Symbol

Array = NDArray[np.inexact]
ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


class StepRule(Protocol):
    """How the quadratic step is done."""

    def step(self, quadratic: GeneralQuadratic, symbol: Symbol) -> Step:
        """The map for one symbol."""


@dataclass(frozen=True)
class GradientStep:
    """Conjugate gradients from the start given, preconditioned by graded block solves.

    Attributes
    ----------
    stopping
        Tolerance on the relative residual in the preconditioner's norm, and most iterations.
    """

    stopping: Stopping = field(default_factory=lambda: Stopping(tolerance=1e-4, limit=50))

    def step(self, quadratic: GeneralQuadratic, symbol: Symbol) -> Step:
        system = quadratic.system(symbol)

        def solve(right: Array, start: Array | None = None) -> Array:
            return iterate(system, right, self.stopping, start)[0].x

        return solve


@dataclass(frozen=True)
class MajorisedStep:
    """Fill in what the channels miss, then the exact block step: majorise–minimise.

    With c the largest |g|² v of a channel, c·G₀ majorises G, G₀ the blocks of ideal channels:

        x ← (c G₀ + S)⁻¹ (r + (c G₀ − G) x),   (c G₀ − G) x = A₀ᴴ (c − |g|² v) A₀ x

    which never raises the objective. For dead pixels it is y ← D y + (1 − D) A x. It holds for
    what single channels do (gain, noise, dead, missing at the edge of the view), not for a patchy
    layer or wavevectors off the lattice.

    Attributes
    ----------
    passes
        Updates per step.
    """

    passes: int = 1

    def step(self, quadratic: GeneralQuadratic, symbol: Symbol) -> Step:
        if not quadratic.operator.model.only_channels:
            raise InputError(
                "a patchy layer, wavevectors off the lattice or times per shot have no majoriser",
                "majorised step",
                "use conjugate gradients",
            )
        exact = quadratic.majoriser.step(symbol)

        def update(right: Array, start: Array | None = None) -> Array:
            x = exact(right) if start is None else start
            for _ in range(self.passes):
                x = exact(right + quadratic.missing(x))
            return x

        return update


class GeneralQuadratic:
    """The data term of a record through the general operator.

    Parameters
    ----------
    operator
        complex64.
    statistics
        From `recon.forward.general_statistics.gather`.
    real
        The unknown is real (amounts) rather than complex.
    rule
        How the quadratic step is done.
    """

    def __init__(
        self,
        operator: GeneralOperator,
        statistics: GeneralStatistics,
        real: bool = False,
        rule: StepRule | None = None,
    ) -> None:
        self.operator, self.statistics, self.real = operator, statistics, real
        self.rule: StepRule = GradientStep() if rule is None else rule
        self.shape = operator.object_shape
        self.dtype = np.dtype(np.float32 if real else np.complex64)
        self.unit = np.ones(self.shape[0], np.float32)
        self._unscaled: dict[str, Any] = {}

    @cached_property
    def linear(self) -> Array:
        """b = Aᴴ W y, (components, nz, ny, nx); its real part for a real unknown."""
        return self._kept(self.statistics.linear * self._factor)

    @property
    def energy(self) -> float:
        """‖W^{1/2} y‖²."""
        return self.statistics.energy

    def with_linear(self, b: Array) -> GeneralQuadratic:
        """The same G with another b (the energy stays that of the record)."""
        other = copy(self)
        other.__dict__["linear"] = b
        return other

    def scaled(self, unit: FloatArray) -> GeneralQuadratic:
        """The data term for unknowns counted in units of size `unit`, (components,)."""
        other = GeneralQuadratic(self.operator, self.statistics, self.real, self.rule)
        other.unit = (self.unit * unit).astype(np.float32)
        other._unscaled = self._unscaled
        return other

    def value(self, x: Array) -> float:
        """q(x)."""
        quadratic = float(np.vdot(x, self.normal(x)).real)
        return 0.5 * quadratic - float(np.vdot(self.linear, x).real) + 0.5 * self.energy

    def misfit(self, x: Array) -> float:
        """Mean squared residual in units of the noise variance: 1 when x explains the record."""
        return 2 * self.value(x) / self.statistics.samples

    def normal(self, x: Array) -> Array:
        """G x."""
        image = self._apply_normal(x * self._factor)
        image *= self._factor
        return self._kept(image)

    def missing(self, x: Array) -> Array:
        """(c G₀ − G) x: what the channels lack beside the majoriser, filled in from x."""
        return self.majoriser.normal(x) - self.normal(x)

    def gradient(self, x: Array) -> Array:
        """G x − b."""
        return self.normal(x) - self.linear

    def step(self, symbol: Symbol) -> Step:
        """The map r ↦ (G + symbol)⁻¹ r, as exact as the rule makes it; takes a start."""
        return self.rule.step(self, symbol)

    def system(self, symbol: Symbol) -> System:
        """G + symbol and its preconditioner, for conjugate gradients."""
        solve = self.graded.step(symbol)
        return System(lambda x: self.normal(x) + symbol.apply(x), solve)

    @cached_property
    def graded(self) -> GradedBlocks:
        """Block solves that follow the local information."""
        return GradedBlocks(self._local, self._ideal)

    @cached_property
    def nearest(self) -> BlockQuadratic:
        """The ideal blocks at the mean information of the channels, with the record's b.

        A guide for rough choices of weight.
        """
        return self._ideal(self.operator.model.mean_information)

    @cached_property
    def majoriser(self) -> BlockQuadratic:
        """c G₀ of `MajorisedStep`."""
        return self._ideal(float(self.operator.model.channels.information.max()))

    @cached_property
    def largest(self) -> float:
        """G's largest eigenvalue: a bound by the majoriser, or by Lanczos plus 3 %."""
        if self.operator.model.only_channels:
            return self.majoriser.largest
        size = int(np.prod(self.shape))
        normal = LinearOperator(
            (size, size), lambda x: self.normal(x.reshape(self.shape)).ravel(), dtype=self.dtype
        )
        start = np.random.default_rng(0).standard_normal(size).astype(self.dtype)
        top = eigsh(normal, 1, which="LM", tol=1e-2, v0=start, return_eigenvectors=False)
        return 1.03 * float(top[0].real)

    def diagonal(self) -> FloatArray:
        """Mean over the lateral axes of G's diagonal, (components, nz), by the nearest blocks.

        Exact for what single channels do.
        """
        return self.nearest.diagonal()

    def noise(self, random: np.random.Generator) -> Array:
        """A draw of Aᴴ W n: covariance G for a complex unknown, ½ G for a real one."""
        return self._kept(self.operator.noise(random) * self._factor)

    def _kept(self, x: Array) -> Array:
        kept = np.ascontiguousarray(x.real) if self.real else x
        return kept.astype(self.dtype, copy=False)

    @property
    def _factor(self) -> FloatArray:
        return self.unit[:, None, None, None]

    def _once(self, name: str, make: Callable[[], Any]) -> Any:
        """What does not depend on the units: made when first asked for, then shared by all."""
        if name not in self._unscaled:
            self._unscaled[name] = make()
        return self._unscaled[name]

    @property
    def _apply_normal(self) -> Callable[[ComplexArray], ComplexArray]:
        """G by blocks of twice the size where they are exact, else by a pass over the shots."""
        operator = self.operator
        exact = is_toeplitz(operator.model)
        return self._once("normal", lambda: ToeplitzNormal(operator)) if exact else operator.normal

    @property
    def _local(self) -> FloatArray:
        return np.asarray(self._once("local", lambda: local_information(self.operator)))

    @property
    def _blocks(self) -> Statistics:
        """Blocks of ideal channels, unscaled, with the record's b."""
        blocks: Statistics = self._once("blocks", self._ideal_statistics)
        return blocks

    def _ideal_statistics(self) -> Statistics:
        model = self.operator.model
        layout, normal = normal_blocks(ForwardOperator(model.ideal, np.complex64))
        linear = scipy.fft.fft2(self.statistics.linear.astype(np.complex64))
        gram, energy = model.mean_gram(), self.statistics.energy
        return Statistics(model.grid, layout, linear, normal, gram, energy, self.statistics.samples)

    def _ideal(self, factor: float) -> BlockQuadratic:
        blocks = self._blocks.scaled(self.unit)
        scaled = Statistics(
            blocks.grid,
            blocks.layout,
            blocks.linear,
            blocks.normal * np.float32(factor),
            blocks.gram,
            blocks.energy,
            blocks.samples,
        )
        return BlockQuadratic(scaled, self.real)
