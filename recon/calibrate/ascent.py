"""Gauss–Newton steps on a log likelihood, in stages of ever more shots."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.compressed import Progress
from recon.calibrate.estimate import Estimate
from recon.calibrate.geometry_parameters import EVERY, Quantity, named
from recon.calibrate.identifiable import Told, told
from recon.errors import InputError, InputWarning

FloatArray = NDArray[np.floating]

ENOUGH = 0.1
"""Largest step, in standard errors, that ends the search."""
MOST_PASSES = 12
CUTS = 5
DOUBTFUL_MISFIT = 1.2


@dataclass(frozen=True, eq=False)
class Evaluation:
    """A log likelihood at one place.

    Attributes
    ----------
    value
        The log likelihood up to a constant.
    score, information
        Its gradient, and minus its expected second derivative, in the quantities' units.
    misfit
        Weighted squared residual per sample: 1 when noise (and prior) explain it.
    """

    value: float
    score: FloatArray
    information: FloatArray
    misfit: float


Evaluate = Callable[[dict[str, float]], Evaluation]


@dataclass(frozen=True, eq=False)
class GeometryFit:
    """Geometry as a record tells it.

    Attributes
    ----------
    estimates
        Those asked for, in the order asked, then the stated ones.
    covariance
        Of the estimated ones, zero along directions that the record does not tell.
    undetermined
        One line per direction that the record does not tell.
    misfit
        Weighted squared residual per sample at the estimate: 1 when the noise explains it.
    passes
        How often the record was compared with the model.
    """

    estimates: tuple[Estimate, ...]
    covariance: FloatArray
    undetermined: tuple[str, ...]
    misfit: float
    passes: int

    def __getitem__(self, name: str) -> Estimate:
        for one in self.estimates:
            if one.name == name:
                return one
        raise InputError(f"'{name}' was neither estimated nor stated", "calibration")

    def __str__(self) -> str:
        lines = [str(one) for one in self.estimates]
        return "\n".join([*lines, *self.undetermined, f"misfit {self.misfit:.4g}"])


def chosen(
    quantities: Sequence[Quantity | str], stated: Sequence[Estimate], nominal: dict[str, float]
) -> tuple[tuple[Quantity, ...], dict[str, float]]:
    """What is unknown, and where the search begins.

    Raises
    ------
    InputError
        A quantity does not exist, is asked for twice, or nothing is left to estimate.
    """
    names = [one if isinstance(one, str) else one.name for one in quantities]
    named([*names, *(one.name for one in stated)])
    if len(set(names)) < len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise InputError(f"'{twice}' is asked for twice", "calibration", "ask once")
    kept = {one.name for one in stated}
    unknown = tuple(EVERY[name] for name in names if name not in kept)
    if not unknown:
        raise InputError("nothing is left to estimate", "calibration", "state fewer quantities")
    return unknown, nominal | {one.name: one.value for one in stated}


def ascend(
    evaluate: Evaluate,
    unknown: Sequence[Quantity],
    values: dict[str, float],
    progress: Progress | None = None,
) -> tuple[dict[str, float], Evaluation, Told, int]:
    """Gauss–Newton until the step is below a tenth of the standard error.

    A step is cut to a third while it lowers the likelihood or leaves what can be modelled, and
    never exceeds a quantity's reach.

    Returns
    -------
    The place, the evaluation and its judgement one step before it, and the number of passes.
    """
    here = evaluate(values)
    passes = 1
    while True:
        judged = told(here.information, unknown)
        step = judged.step(here.score)
        step /= max(1.0, max(abs(s) / q.reach for s, q in zip(step, unknown, strict=True)))
        spread = np.sqrt(np.diag(judged.covariance))
        if progress is not None:
            progress(passes, MOST_PASSES)
        if (np.abs(step) <= ENOUGH * spread).all() or passes >= MOST_PASSES:
            if passes >= MOST_PASSES:
                warnings.warn("the search did not settle", InputWarning, stacklevel=3)
            return _moved(values, unknown, step), here, judged, passes
        for _ in range(CUTS):
            trial = _moved(values, unknown, step)
            passes += 1
            try:
                there = evaluate(trial)
            except InputError:  # beyond what can be modelled
                step = step / 3
                continue
            if there.value > here.value:
                values, here = trial, there
                break
            step = step / 3
        else:
            return values, here, judged, passes


def _moved(
    values: dict[str, float], unknown: Sequence[Quantity], step: FloatArray
) -> dict[str, float]:
    moved = dict(values)
    for one, change in zip(unknown, step, strict=True):
        moved[one.name] = max(values[one.name] + float(change), one.least)
    return moved


def concluded(
    unknown: Sequence[Quantity],
    stated: Sequence[Estimate],
    values: dict[str, float],
    judged: Told,
    misfit: float,
    passes: int,
) -> GeometryFit:
    """Put the result together; warn if the model does not explain the record."""
    if misfit > DOUBTFUL_MISFIT:
        warnings.warn(
            f"the misfit is {misfit:.3g} at the calibrated geometry: something else in the model "
            "is wrong, and the standard errors are too small",
            InputWarning,
            stacklevel=3,
        )
    found = [
        Estimate(one.name, one.unit, values[one.name], float(error))
        for one, error in zip(unknown, judged.standard_error, strict=True)
    ]
    kept = [Estimate(one.name, EVERY[one.name].unit, one.value, 0.0, True) for one in stated]
    return GeometryFit((*found, *kept), judged.covariance, judged.lines, misfit, passes)
