"""What a calibration found against what was expected, one row per quantity."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.figure import Figure

from recon.errors import InputError
from recon.figures import style

MOST = 8.0
GOOD, BAD = style.LINES[2], style.LINES[1]


@dataclass(frozen=True)
class Verdict:
    """One calibrated quantity.

    Attributes
    ----------
    name, unit
        What it is.
    estimate, standard_error
        What was found.
    expected, allowance
        What the description says, and how far off it may be.
    advice
        What to do if it is further off.
    """

    name: str
    unit: str
    estimate: float
    standard_error: float
    expected: float
    allowance: float
    advice: str = ""

    def __post_init__(self) -> None:
        numbers = (self.estimate, self.standard_error, self.expected, self.allowance)
        if not np.isfinite(numbers).all() or self.standard_error < 0 or not self.allowance > 0:
            raise InputError("needs finite numbers and a positive allowance", f"'{self.name}'")

    @property
    def offset(self) -> float:
        """Deviation in units of the allowance."""
        return (self.estimate - self.expected) / self.allowance

    @property
    def within(self) -> bool:
        """The deviation is no more than allowance and two standard errors explain."""
        spread = np.hypot(self.allowance, 2 * self.standard_error)
        return bool(abs(self.estimate - self.expected) <= spread)

    def __str__(self) -> str:
        found = f"{self.estimate:.4g} ± {self.standard_error:.2g} {self.unit}"
        if self.within:
            return f"{self.name}: {found}, within expectation ({self.expected:.4g} {self.unit})"
        off = self.estimate - self.expected
        advice = f"; {self.advice}" if self.advice else ""
        return f"{self.name}: {found}, off by {off:+.3g} {self.unit}{advice}"


def verdicts(found: Sequence[Verdict]) -> Figure:
    """Deviation ± 1 standard error of each quantity in units of its allowance.

    Raises
    ------
    InputError
        There is no verdict.
    """
    if not found:
        raise InputError("there is no verdict to draw", "figure")
    with style.applied():
        figure = style.new_figure(style.PAGE_WIDTH, 0.9 + 0.34 * len(found))
        axes = figure.subplots()
        axes.axvspan(-1, 1, color="#dfe8e4", zorder=0)
        axes.axvline(0, color=style.FAINT, linewidth=0.8, zorder=1)
        for row, one in enumerate(found):
            place = float(np.clip(one.offset, -MOST, MOST))
            colour = GOOD if one.within else BAD
            marker = "o" if abs(one.offset) <= MOST else (">" if one.offset > 0 else "<")
            axes.errorbar(
                place,
                row,
                xerr=one.standard_error / one.allowance,
                color=colour,
                marker=marker,
                capsize=3,
            )
            text = f"{one.estimate:.4g} ± {one.standard_error:.2g} {one.unit}"
            axes.annotate(
                text,
                (1.02, row),
                xycoords=("axes fraction", "data"),
                va="center",
                color=style.INK,
                annotation_clip=False,
            )
        reach = max(2.0, min(MOST, 1.2 * max(abs(one.offset) for one in found)))
        axes.set_xlim(-reach, reach)
        axes.set_ylim(len(found) - 0.5, -0.5)
        axes.set_yticks(range(len(found)), [one.name for one in found])
        axes.set_xlabel("deviation from the description, in units of what is allowed (shaded)")
    return figure
