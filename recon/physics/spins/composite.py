"""Magnetically equivalent spins ½ joined into composite spins.

n equivalent spins ½ act as one spin I = n/2, n/2 − 1, ... (0 or ½), I occurring
C(n, n/2 − I) − C(n, n/2 − I − 1) times (any text on angular momentum). A methyl group is one
spin 3/2 and two spins ½. This is exact: H and the observed Fx hold only total spins of each group.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import product
from math import comb, prod


def composite_spins(count: int) -> list[tuple[int, int]]:
    """The composite spins of `count` equivalent spins ½, as pairs (2I, how often).

    The dimensions add up: Σ how often × (2I + 1) = 2^count.
    """
    return [
        (count - 2 * pairs, comb(count, pairs) - (comb(count, pairs - 1) if pairs else 0))
        for pairs in range(count // 2 + 1)
    ]


def composite_choices(counts: list[int]) -> Iterator[tuple[tuple[int, ...], int]]:
    """Every combination of composite spins of several groups: (2I of each group, how often)."""
    for choice in product(*(composite_spins(count) for count in counts)):
        yield tuple(twice for twice, _ in choice), prod(often for _, often in choice)
