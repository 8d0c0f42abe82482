"""How good any table of shots could be: a lower bound by continuous weights.

With weights ξ_j ≥ 0, Σ ξ_j = N, in place of whole shots, the criterion is convex, and for any ξ

    f* ≥ f(ξ) − (N · max_j g_j − Σ_j ξ_j g_j),     g_j = −∂f/∂ξ_j,

a certificate that Frank–Wolfe steps towards the best candidate improve. Sources: Frank & Wolfe,
Naval Research Logistics 3:95 (1956); Kiefer & Wolfowitz, Canad. J. Math. 12:363 (1960).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from recon.planning.candidates import Candidates
from recon.planning.information import Information, Pair, Scores


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


def lower_bound(
    information: Information,
    scores: Scores,
    candidates: Candidates,
    pairs: list[Pair],
    steps: int = 40,
) -> Relaxation:
    """Start from a table whose shots are already in `information`, and move away from it.

    `information` is changed: it ends at the relaxed design.
    """
    total = float(len(pairs))
    weights = np.zeros(candidates.allowed.shape)
    np.add.at(weights, tuple(np.array(pairs).T), 1.0)
    table = information.criterion()
    best = -np.inf
    done = 0
    for step in range(1, steps + 1):
        done = step
        slopes = scores.falls(information)
        reached = np.where(candidates.allowed, slopes, 0)
        value = information.criterion()
        used = float((weights * reached).sum())
        best = max(best, value - (total * float(reached.max()) - used))
        place = np.unravel_index(int(np.argmax(slopes)), slopes.shape)
        target = np.zeros_like(weights)
        target[place] = total
        share = _move(information, (int(place[0]), int(place[1])), candidates, total)
        weights = (1 - share) * weights + share * target
        if value - best < 1e-3 * value:
            break
    return Relaxation(table, best, done)


def _move(information: Information, pair: Pair, candidates: Candidates, total: float) -> float:
    """Move the best share of all weight to one candidate, by trying halves; returns the share."""
    touched, vectors = information.vectors(information.responses.at(candidates, pair))
    whole = np.zeros_like(information.normal)
    whole[touched] = total * (vectors @ vectors.conj().transpose(0, 2, 1))
    start, best, chosen = information.normal, information.criterion(), 0.0
    for share in 0.5 ** np.arange(2, 12):
        information.normal = (1 - share) * start + share * whole
        information.refresh()
        value = information.criterion()
        if value < best:
            best, chosen = value, float(share)
        elif chosen:
            break
    information.normal = (1 - chosen) * start + chosen * whole
    information.refresh()
    return chosen
