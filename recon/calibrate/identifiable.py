"""What an information matrix can tell: standard errors, and directions that stay open.

Every quantity is measured in its own `reach`. An eigenvalue of the information below 1 belongs to
a combination whose standard deviation exceeds the reach: the record does not tell it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.geometry_parameters import Quantity

FloatArray = NDArray[np.floating]

SHARE = 0.02
"""Share of an open direction above which a quantity belongs to it."""


@dataclass(frozen=True, eq=False)
class Told:
    """An information matrix, judged.

    Attributes
    ----------
    covariance
        Inverse over the directions that are told, (quantities, quantities).
    standard_error
        Square root of its diagonal; infinite for quantities in an open direction.
    lines
        One line per open direction.
    """

    covariance: FloatArray
    standard_error: FloatArray
    lines: tuple[str, ...]

    def step(self, score: FloatArray) -> FloatArray:
        """Newton step from the gradient of the log likelihood; none along open directions."""
        return self.covariance @ score


def told(information: FloatArray, quantities: Sequence[Quantity]) -> Told:
    """Judge an information matrix (quantities, quantities) in the quantities' units."""
    reach = np.array([one.reach for one in quantities])
    scaled = information * np.outer(reach, reach)
    values, vectors = np.linalg.eigh((scaled + scaled.T) / 2)
    seen = values >= 1
    inverse = (vectors[:, seen] / values[seen]) @ vectors[:, seen].T
    covariance = inverse * np.outer(reach, reach)
    error = np.sqrt(np.diag(covariance))
    lines = []
    open_share = (vectors[:, ~seen] ** 2).sum(axis=1)
    error[open_share > SHARE] = np.inf
    for vector in vectors[:, ~seen].T:
        names = [one.name for one, part in zip(quantities, vector, strict=True) if part**2 > SHARE]
        lines.append(_line(names))
    return Told(covariance, error, tuple(dict.fromkeys(lines)))


def _line(names: Sequence[str]) -> str:
    if len(names) == 1:
        return f"the record cannot tell {names[0]}; state it"
    head = f"{', '.join(names[:-1])} and {names[-1]}"
    return f"the record cannot tell {head} apart; state one of them"
