"""What a fit of all voxels gives."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import gamma

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True, eq=False)
class Fitted:
    """Amounts of all patterns and what came with them.

    Attributes
    ----------
    names
        Of the patterns.
    amounts, standard_error
        mM, (patterns, nz, ny, nx).
    shift_Hz, decay_per_s, phase_rad
        Nuisances (nz, ny, nx), and `nuisance_error` (3, nz, ny, nx).
    chi_squared
        Σ|residual|²/σ² over degrees of freedom per voxel, expectation 1, (nz, ny, nx).
    model
        Fitted time courses, complex64 (times, nz, ny, nx), A/m.
    degrees_of_freedom
        Complex residuals per voxel: dimensions less half the real parameters.
    blank_error
        Standard error of each amount were there none of it, mM, (patterns, nz, ny, nx).
    correlation, partner
        Largest |correlation| of each amount's error with another's, and whose, both
        (patterns, nz, ny, nx).
    bounds
        Of shift, decay and phase; 0 where they are held.
    """

    names: tuple[str, ...]
    amounts: FloatArray
    standard_error: FloatArray
    shift_Hz: FloatArray  # noqa: N815
    decay_per_s: FloatArray
    phase_rad: FloatArray
    nuisance_error: FloatArray
    chi_squared: FloatArray
    model: ComplexArray
    degrees_of_freedom: float
    blank_error: FloatArray
    correlation: FloatArray
    partner: NDArray[np.integer]
    bounds: tuple[float, ...]

    def poor(self, chance: float) -> NDArray[np.bool_]:
        """Voxels whose χ² noise alone would exceed with this probability, (nz, ny, nx).

        Σ|residual|²/σ² of n complex residuals follows a gamma law of shape n.
        """
        degrees = self.degrees_of_freedom
        return np.asarray(self.chi_squared > gamma.isf(chance, degrees) / degrees)

    def failed_assumption(self) -> str:
        """Which assumption the data refuse, by the size of nuisances in their own errors."""
        told = []
        for name, value, error in (
            ("line positions (shift)", self.shift_Hz, self.nuisance_error[0]),
            ("line widths (decay)", self.decay_per_s, self.nuisance_error[1]),
            ("phase", self.phase_rad, self.nuisance_error[2]),
        ):
            used = error > 0
            if used.any():
                size = float(np.sqrt(np.mean((value[used] / error[used]) ** 2)))
                if size > 2:
                    told.append((size, f"{name}: {size:.2g} standard errors r.m.s."))
        poor = float(np.mean(self.poor(1e-3)))
        if poor > 0.05:
            told.append((1e3 * poor, f"an unknown line or baseline: {100 * poor:.0f} % poor fits"))
        return max(told)[1] if told else ""
