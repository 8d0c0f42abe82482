"""Channels that cannot be trusted, found by their own residuals.

In place of half the square, a channel's root mean square residual r_c (units of σ) costs

    h(r) = ½ r²  for r ≤ t,   t r − ½ t²  beyond,

per sample (Huber, Ann. Math. Statist. 35:73, 1964, on the norm of a channel). Iteratively
reweighted least squares minimises it: weight v_c ← v_c min(1, t/r_c), a quadratic problem again.
Each round reads the record twice: once for the residuals, once for b.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.forward.general import GeneralOperator
from recon.forward.general_statistics import Batches, channel_residuals, gather
from recon.solvers.general import GeneralQuadratic
from recon.solvers.loop import Reason, relative

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]
Solver = Callable[[GeneralQuadratic, Array | None], Array]
"""Solution of a problem with this data term, from a start or from nothing."""


@dataclass(frozen=True)
class Trust:
    """Settings.

    Attributes
    ----------
    threshold
        t: residual in units of σ up to which a channel counts in full.
    tolerance
        Rounds end when the weights' relative change falls below it.
    limit
        Most rounds.
    """

    threshold: float = 1.5
    tolerance: float = 1e-3
    limit: int = 20

    def __post_init__(self) -> None:
        if not (self.threshold > 0 and self.tolerance >= 0 and self.limit >= 1):
            raise InputError("threshold and limit must be positive", "outlier channels")


@dataclass(frozen=True, eq=False)
class Trusted:
    """A solution with its channels weighed.

    Attributes
    ----------
    x
        The unknown.
    trust
        Factor on every channel's weight, 1 where it counts in full, (channels y, channels x).
    residual
        Root mean square residual of every channel in units of its stated noise, same shape.
    rounds, reason
        How often it was reweighted, and why that ended.
    quadratic
        The data term with the final weights.
    """

    x: Array
    trust: FloatArray
    residual: FloatArray
    rounds: int
    reason: Reason
    quadratic: GeneralQuadratic


def solve_with_trust(
    quadratic: GeneralQuadratic,
    batches: Callable[[], Batches],
    solver: Solver,
    settings: Trust | None = None,
) -> Trusted:
    """Solve, judge every channel by its residual, and solve again until the judgement stands.

    Parameters
    ----------
    quadratic
        The data term with the channels' stated weights, not scaled.
    batches
        Called for every pass over the record; shots in order.
    """
    settings = settings or Trust()
    base = quadratic.operator
    trust: FloatArray = np.ones(base.model.channels.shape)
    residual, reason, current = trust, Reason.LIMIT, quadratic
    x: Array | None = None
    rounds = 0
    while rounds < settings.limit:
        rounds += 1
        x = solver(current, x)
        residual = channel_residuals(base, x * current.unit[:, None, None, None], batches())
        before = trust
        trust = np.minimum(1, settings.threshold / np.maximum(residual, settings.threshold))
        if relative(np.linalg.norm(trust - before), np.linalg.norm(trust)) < settings.tolerance:
            reason = Reason.CONVERGED
            break
        current = _reweighted(quadratic, base, trust, batches())
    assert x is not None
    return Trusted(x, trust, residual, rounds, reason, current)


def _reweighted(
    quadratic: GeneralQuadratic, base: GeneralOperator, trust: FloatArray, batches: Batches
) -> GeneralQuadratic:
    operator = base.with_channels(base.model.channels.reweighted(trust))
    other = GeneralQuadratic(operator, gather(operator, batches), quadratic.real, quadratic.rule)
    return other.scaled(quadratic.unit)
