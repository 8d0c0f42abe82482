"""How good any table of shots could be: a lower bound by continuous weights.

With weights ξ_j ≥ 0, Σ ξ_j = N, in place of whole shots, the criterion is convex, and for any ξ

    f* ≥ f(ξ) − (N · max_j g_j − Σ_j ξ_j g_j),     g_j = −∂f/∂ξ_j,

a certificate that Frank–Wolfe steps towards the best candidate improve. Sources: Frank & Wolfe,
Naval Research Logistics 3:95 (1956); Kiefer & Wolfowitz, Canad. J. Math. 12:363 (1960).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from recon.planning.information import Information
from recon.planning.responses import Pair
from recon.planning.scores import Scores


@dataclass(frozen=True)
class Relaxation:
    """Result: the criterion of the table, and the best lower bound found."""

    table: float
    lower_bound: float
    steps: int

    @property
    def gap(self) -> float:
        """By what share the table lies above the lower bound at most."""
        return self.table / self.lower_bound - 1


def lower_bound(information: Information, pairs: list[Pair], steps: int = 40) -> Relaxation:
    """Start from a table of shots, and move away from it.

    `information` is changed: it ends at the relaxed design.
    """
    scores, allowed = Scores(information), information.responses.candidates.allowed
    information.set_table(pairs)
    total = float(len(pairs))
    weights = np.zeros(allowed.shape)
    np.add.at(weights, tuple(np.array(pairs).T), 1.0)
    table = information.criterion()
    best = -np.inf
    done = 0
    for step in range(1, steps + 1):
        done = step
        slopes = scores.falls(information)
        reached = np.where(allowed, slopes, 0)
        value = information.criterion()
        used = float((weights * reached).sum())
        best = max(best, value - (total * float(reached.max()) - used))
        place = np.unravel_index(int(np.argmax(slopes)), slopes.shape)
        target = np.zeros_like(weights)
        target[place] = total
        share = _move(information, (int(place[0]), int(place[1])), total)
        weights = (1 - share) * weights + share * target
        if value - best < 1e-3 * value:
            break
    return Relaxation(table, best, done)


def _move(information: Information, pair: Pair, total: float) -> float:
    """Move the best share of all weight to one candidate, by trying halves; returns the share."""
    touched, vectors = information.vectors(pair)
    whole = np.zeros_like(information.data)
    whole[:, touched] = total * (vectors @ vectors.conj().swapaxes(-1, -2))
    start, best, chosen = information.data, information.criterion(), 0.0
    for share in 0.5 ** np.arange(2, 12):
        information.data = (1 - share) * start + share * whole
        information.refresh()
        value = information.criterion()
        if value < best:
            best, chosen = value, float(share)
        elif chosen:
            break
    information.data = (1 - chosen) * start + chosen * whole
    information.refresh()
    return chosen
