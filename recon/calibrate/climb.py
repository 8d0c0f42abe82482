"""Newton's method on a function that is only evaluated, and its Hessian at the top."""

from __future__ import annotations

import warnings
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.compressed import Progress
from recon.errors import InputWarning

FloatArray = NDArray[np.floating]

GAIN = 0.01
"""Expected gain at which the search ends; a place one standard error off the top loses 0.5."""
MOST_STEPS = 15
SPREAD = 0.3
"""Half step of differences in standard deviations of the coordinate."""
TINY = 1e-12
WIDEST = 15.0
"""How much a half step may grow beyond the one that was given."""


def climb(
    function: Callable[[FloatArray], float],
    point: FloatArray,
    steps: FloatArray,
    least: FloatArray,
    noise: float = 0.0,
    progress: Progress | None = None,
) -> tuple[FloatArray, FloatArray]:
    """The top of a smooth function, and minus its Hessian there.

    Parameters
    ----------
    steps
        First half steps of the differences, (n,); they adapt to the curvature.
    least
        Lower bounds, (n,).
    noise
        Rounding error of the function.

    Returns
    -------
    The place (n,) and minus the Hessian (n, n).
    """
    first, widths = steps, steps
    spread = max(SPREAD, np.sqrt(100 * noise))
    for count in range(MOST_STEPS):
        value, slope, hessian = differences(function, point, widths, least)
        values, vectors = np.linalg.eigh(hessian)
        curvature = np.maximum(np.abs(values), max(1e-3 * np.abs(values).max(), TINY))
        step = vectors @ ((vectors.T @ slope) / curvature)
        step *= min(1.0, 0.7 / np.abs(step).max())
        if progress is not None:
            progress(count + 1, MOST_STEPS)
        strength = np.sqrt(np.maximum(np.diag(hessian), 1e-300))
        widths = np.clip(spread / strength, 0.3 * first, WIDEST * first)
        moved = np.maximum(point + step, least)
        if slope @ (moved - point) < 2 * max(GAIN, noise):
            return moved, differences(function, moved, widths, least)[2]
        while function(moved) < value - 2 * noise and np.abs(moved - point).max() > 1e-4:
            moved = point + (moved - point) / 3
        point = moved
    warnings.warn("the evidence did not settle", InputWarning, stacklevel=3)
    return point, hessian


def differences(
    function: Callable[[FloatArray], float],
    point: FloatArray,
    widths: FloatArray,
    least: FloatArray,
) -> tuple[float, FloatArray, FloatArray]:
    """Value, gradient and minus the Hessian by central differences; at a bound, just inside."""
    count = len(point)
    centre = np.maximum(point, least + widths)
    shifts = np.diag(widths)
    middle = function(centre)
    up = np.array([function(centre + shift) for shift in shifts])
    down = np.array([function(centre - shift) for shift in shifts])
    hessian = np.diag(-(up + down - 2 * middle) / widths**2)
    for i in range(count):
        for j in range(i):
            both = function(centre + shifts[i] + shifts[j])
            mixed = -(both - up[i] - up[j] + middle) / (widths[i] * widths[j])
            hessian[i, j] = hessian[j, i] = mixed
    slope = (up - down) / (2 * widths) - hessian @ (point - centre)
    return middle, slope, hessian
