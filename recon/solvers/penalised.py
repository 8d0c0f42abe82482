"""Penalised least squares: any combination of priors, one weight, chosen by a rule."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from recon.forward.blocks import BlockQuadratic
from recon.priors.base import Edges, Frame, Prior, Term
from recon.solvers.admm import ADMM, ADMMState
from recon.solvers.estimate import Estimate, Progress, silent
from recon.solvers.loop import Reason, Residuals, Solution, Stopping, solve
from recon.solvers.problem import Problem, Weighted
from recon.solvers.replicas import Replicas, Scatter
from recon.solvers.resolution import PointResponse, Responses, resting_on_prior
from recon.solvers.weight import Fixed, SteinRisk, WeightRule

Array = NDArray[np.inexact]
GUESS = 1.0
"""Weight of the rough solution that guides the choice where blocks are not exact."""


@dataclass(frozen=True)
class Penalised:
    """½‖W^{1/2}(y − A x)‖² + λ Σ_i s_i R_i(x).

    Attributes
    ----------
    priors
        What is assumed; constraints last, so that the estimate meets them.
    shares
        Relative weights s_i of the priors; equal if empty.
    weight
        How λ is chosen.
    method, stopping
        How it is solved.
    search_tolerance
        Tolerance of the solves that the search for the weight makes.
    replicas
        How errors are drawn; None leaves them out.
    resolution
        How point responses are measured; None leaves them out.
    """

    priors: tuple[Prior, ...]
    shares: tuple[float, ...] = ()
    weight: WeightRule = field(default_factory=SteinRisk)
    method: ADMM = field(default_factory=ADMM)
    stopping: Stopping = field(default_factory=lambda: Stopping(tolerance=5e-3, limit=300))
    search_tolerance: float = 1.5e-2
    replicas: Replicas | None = field(default_factory=Replicas)
    resolution: PointResponse | None = field(default_factory=PointResponse)

    def __str__(self) -> str:
        return ", ".join(str(prior) for prior in self.priors)

    def estimate(
        self, quadratic: BlockQuadratic, frame: Frame, progress: Progress = silent
    ) -> Estimate:
        """Choose the weight, solve, and draw replicas for the error."""
        run = _Run(self, quadratic, tuple(prior.on(frame) for prior in self.priors), progress)
        weight = run.chosen_weight()
        solution = run.solve(weight, quadratic, self.stopping, None)
        scatter = responses = None
        if self.replicas is not None:
            scatter = run.scatter(weight, solution, self.replicas)
        if self.resolution is not None:
            responses = run.responses(weight, solution, self.resolution, frame.voxel)
        return Estimate(
            x=solution.x,
            weights={
                str(prior): weight * share
                for prior, part, share in zip(self.priors, run.terms, run.shares, strict=True)
                if not part.constraint
            },
            reason=solution.reason,
            misfit=solution.misfit,
            history=solution.history,
            standard_error=None if scatter is None else scatter.standard_error,
            resolution=None if responses is None else responses.width,
            remarks=(
                *(() if scatter is None else (_remark(scatter),)),
                *(() if responses is None else resting_on_prior(responses.recovered)),
            ),
        )


class _Run:
    """One estimation: bound priors and their shares."""

    def __init__(
        self,
        settings: Penalised,
        quadratic: BlockQuadratic,
        terms: tuple[Term, ...],
        progress: Progress,
    ) -> None:
        self.settings, self.quadratic, self.terms = settings, quadratic, terms
        self.shares = settings.shares or (1.0,) * len(terms)
        self.progress = progress

    def chosen_weight(self) -> float:
        """λ by the rule; where blocks are not exact, by the nearest blocks that are."""
        rule = self.settings.weight
        if isinstance(rule, Fixed) or not hasattr(self.quadratic, "nearest"):
            return rule.choose(self.quadratic, self.searcher(), self.searcher())
        guide = self._guide()
        run = _Run(self.settings, guide, self.terms, self.progress)
        return rule.choose(guide, run.searcher(), run.searcher())

    def _guide(self) -> BlockQuadratic:
        """The nearest blocks, with what they lack filled in from a rough solution.

        G₀ with b + (G₀ − G) x̂ has the gradient of the true data term at x̂.
        """
        rough = Stopping(self.settings.search_tolerance, limit=self.settings.stopping.limit)
        x = self.solve(GUESS, self.quadratic, rough, None).x
        nearest: BlockQuadratic = self.quadratic.nearest  # type: ignore[attr-defined]
        return nearest.with_linear(
            self.quadratic.linear + nearest.normal(x) - self.quadratic.normal(x)
        )

    def solve(
        self,
        weight: float,
        data: BlockQuadratic,
        stopping: Stopping,
        state: ADMMState | None,
        method: ADMM | None = None,
    ) -> Solution[ADMMState]:
        parts = zip(self.terms, self.shares, strict=True)
        problem = Problem(data, tuple(Weighted(term, weight * share) for term, share in parts))

        def watch(iteration: int, residuals: Residuals) -> None:
            self.progress(f"λ {weight:.3g}, iteration {iteration}", None)

        solution = solve(
            problem, method or self.settings.method, stopping, state=state, watch=watch
        )
        if solution.reason is Reason.INTERRUPTED:
            raise KeyboardInterrupt
        return solution

    def searcher(self) -> Callable[[float, Array], Array]:
        """A rough solver that starts where it last ended."""
        rough = Stopping(self.settings.search_tolerance, limit=self.settings.stopping.limit)
        last: ADMMState | None = None

        def run(weight: float, b: Array) -> Array:
            nonlocal last
            solution = self.solve(weight, self.quadratic.with_linear(b), rough, last)
            last = solution.state
            return solution.x

        return run

    def scatter(self, weight: float, solution: Solution[ADMMState], replicas: Replicas) -> Scatter:
        run = self._again(weight, solution, replicas.iterations)
        return replicas.scatter(
            self.quadratic, solution.x, run, lambda done, of: self.progress("replicas", done / of)
        )

    def responses(
        self, weight: float, solution: Solution[ADMMState], points: PointResponse, voxel: Edges
    ) -> Responses:
        run = self._again(weight, solution, points.iterations)
        return points.measure(
            self.quadratic, voxel, run, lambda done, of: self.progress("resolution", done / of)
        )

    def _again(
        self, weight: float, solution: Solution[ADMMState], iterations: int
    ) -> Callable[[Array], Array]:
        """Estimates from other right-hand sides, each afresh from the solution's state.

        The penalty stays, so that the step is not factorised again.
        """
        few = Stopping(0.0, limit=iterations)
        method = replace(self.settings.method, balance_every=0)

        def run(b: Array) -> Array:
            data = self.quadratic.with_linear(b)
            return self.solve(weight, data, few, solution.state.copy(), method).x

        return run


def _remark(scatter: Scatter) -> str:
    shares = ", ".join(f"{100 * share:.0f} %" for share in scatter.bias_share())
    return (
        "standard errors are the scatter and bias of re-noised replicas; share of bias in the mean "
        f"squared error per component: {shares}. Detail that the prior removed from the estimate "
        "is not in them, so intervals can be too narrow where the prior does not hold"
    )
