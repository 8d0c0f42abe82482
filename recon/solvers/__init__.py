"""One loop, one stopping vocabulary, one file per method."""

from recon.solvers.admm import ADMM, ADMMState
from recon.solvers.loop import History, Method, Reason, Residuals, Solution, Stopping, solve
from recon.solvers.primal_dual import PrimalDual, PrimalDualState
from recon.solvers.problem import Problem, Quadratic, Weighted
from recon.solvers.proximal_gradient import ProximalGradient, ProximalGradientState

__all__ = [
    "ADMM",
    "ADMMState",
    "History",
    "Method",
    "PrimalDual",
    "PrimalDualState",
    "Problem",
    "ProximalGradient",
    "ProximalGradientState",
    "Quadratic",
    "Reason",
    "Residuals",
    "Solution",
    "Stopping",
    "Weighted",
    "solve",
]
