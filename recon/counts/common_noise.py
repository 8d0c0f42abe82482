"""Noise that channels share, found in what frames leave unexplained.

The covariance of normalised residuals is taken as 1 + Σ_k p_k p_kᵀ: noise of each channel's own,
and a few patterns p_k over the channels. Patterns are the leading singular vectors that rise
above what independent noise would show, σ(1 + √(channels/frames)) (Marchenko and Pastur, Math. USSR
Sbornik 1:457, 1967). A uniform pattern reaches the samples only at the channels' zero frequency,
where a slice without a sensor gradient says nothing, so that it can be projected out at no cost.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse.linalg import svds

Frames = NDArray[np.float32]
FloatArray = NDArray[np.floating]
MOST_PATTERNS = 3
MOST_FRAMES = 1024
MARGIN = 1.15


@dataclass(frozen=True, eq=False)
class CommonNoise:
    """Patterns of shared noise, (patterns, channels), in units of each channel's whole noise."""

    patterns: FloatArray

    @property
    def share(self) -> float:
        """Variance that is shared, over all."""
        return float((self.patterns**2).sum()) / max(self.patterns.shape[1], 1)

    @property
    def uniform(self) -> bool:
        """The first pattern is the same in all channels, to within a tenth."""
        if not len(self.patterns):
            return False
        first = self.patterns[0]
        return bool(abs(first.mean()) > 0.95 * np.sqrt((first**2).mean()))


def common_noise(residuals: Sequence[Frames], noise: FloatArray, freedom: float) -> CommonNoise:
    """Find it.

    Parameters
    ----------
    residuals
        (frames, channels) each, nothing but noise.
    noise
        Their standard deviation, (channels,).
    freedom
        Share of a residual's variance that the fit left.
    """
    alive = noise > 0
    channels = int(alive.sum())
    none = CommonNoise(np.zeros((0, len(noise))))
    if channels < 16:
        return none
    every = max(1, sum(len(one) for one in residuals) // MOST_FRAMES)
    stacked = np.concatenate([one[::every] for one in residuals])[:, alive]
    stacked /= (noise[alive] * np.sqrt(freedom)).astype(np.float32)
    count = min(MOST_PATTERNS, min(stacked.shape) - 1)
    rng = np.random.default_rng(0)
    start = rng.standard_normal(min(stacked.shape)).astype(np.float32)
    _, values, patterns = svds(stacked, k=count, v0=start)
    order = np.argsort(values)[::-1]
    edge = np.sqrt(len(stacked)) + np.sqrt(channels)
    kept = [k for k in order if values[k] > MARGIN * edge]
    held = np.zeros((len(kept), len(noise)))
    for row, k in enumerate(kept):
        power = values[k] ** 2 / len(stacked) - 1
        held[row, alive] = patterns[k] * np.sqrt(max(power, 0))
    return CommonNoise(held) if kept else none
