"""One loop, one stopping vocabulary, one file per method."""

from recon.solvers.admm import ADMM, ADMMState
from recon.solvers.loop import History, Method, Reason, Residuals, Solution, Stopping, solve
from recon.solvers.problem import Problem, Quadratic, Weighted

__all__ = [
    "ADMM",
    "ADMMState",
    "History",
    "Method",
    "Problem",
    "Quadratic",
    "Reason",
    "Residuals",
    "Solution",
    "Stopping",
    "Weighted",
    "solve",
]
