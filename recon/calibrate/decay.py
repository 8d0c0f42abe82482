"""Decay of the polarisation along the train of shots, from the shots' amplitudes.

ln a_j = −R t_j + c₀ + c₁ |k_j| + c₂ |k_j|² + error, t_j the clock's time. The wavenumber's terms
take up what the assumed smoothness and the voxel's size do to shots of high wavenumber. The
errors' size is taken from the scatter about the fit where that is larger than stated (Birge,
Phys. Rev. 40:207, 1932).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from recon.calibrate.consistency import ShotFactors
from recon.calibrate.estimate import Estimate
from recon.errors import InputError
from recon.protocol import Protocol

LOST = "polarisation lost over the record"


@dataclass(frozen=True)
class Decay:
    """Exponential loss over the train.

    Attributes
    ----------
    rate
        R, 1/s, with its standard error.
    lost
        Share of the polarisation that is gone by the last shot, in per cent.
    """

    rate: Estimate
    lost: Estimate

    @classmethod
    def of_rate(cls, rate: float, error: float, duration: float, fixed: bool = False) -> Decay:
        """From R and the time between the first and the last shot."""
        left = float(np.exp(-rate * duration))
        return cls(
            Estimate("polarisation decay rate", "1/s", rate, error, fixed),
            Estimate(LOST, "%", 100 * (1 - left), 100 * left * duration * error, fixed),
        )

    def applied(self, protocol: Protocol) -> Protocol:
        """The table with the decay in its amplitudes, 1 at the first shot."""
        late = protocol.clock_time - protocol.clock_time.min()
        factor = np.exp(-self.rate.value * late)
        return replace(protocol, amplitude=protocol.amplitude * factor)


def measure_decay(protocol: Protocol, factors: ShotFactors) -> Decay:
    """Fit the decay.

    Raises
    ------
    InputError
        There are too few shots, or the clock stands still.
    """
    late = protocol.clock_time - protocol.clock_time.min()
    duration = float(late.max())
    if len(protocol) < 6 or duration == 0:
        raise InputError(
            f"{len(protocol)} shots within {duration:g} s do not show a decay",
            LOST,
            "state it, or leave it out",
        )
    k = np.linalg.norm(protocol.nuclear_wavevector, axis=1)
    k = k / max(float(k.max()), 1e-30)
    columns = np.stack([np.ones_like(k), -late / duration, k, k**2], axis=1)
    columns = columns[:, [0, 1] + [c for c in (2, 3) if np.ptp(columns[:, c]) > 1e-6]]
    values, errors = factors.log_amplitude, factors.error(0)
    weights = 1 / (errors**2 + _scatter(columns, values, errors))
    normal = columns.T @ (weights[:, None] * columns)
    inverse = np.linalg.inv(normal)
    fitted = inverse @ (columns.T @ (weights * values))
    rest = values - columns @ fitted
    birge = (weights * rest**2).sum() / max(len(values) - columns.shape[1], 1)
    error = float(np.sqrt(inverse[1, 1] * max(1.0, birge)))
    return Decay.of_rate(float(fitted[1]) / duration, error / duration, duration)


def _scatter(columns: np.ndarray, values: np.ndarray, errors: np.ndarray) -> float:
    """Variance beyond the stated errors, from an unweighted fit."""
    fitted, *_ = np.linalg.lstsq(columns, values, rcond=None)
    rest = values - columns @ fitted
    freedom = max(len(values) - columns.shape[1], 1)
    return max(float((rest**2).sum()) / freedom - float(np.mean(errors**2)), 0.0)
