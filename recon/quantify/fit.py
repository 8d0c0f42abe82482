"""Fit every voxel's time course at once.

    y(t) = e^{iθ − i2πΔf t − Γt} Σ_p a_p φ_p(t) + Σ_b c_b β_b(t) + noise

Real amounts a, nuisance phase θ, shift Δf and extra decay Γ per voxel, complex baseline c.
Δf, Γ and θ are bounded and tied to their neighbourhood by a quadratic penalty. The standard
error is the Cramér–Rao bound

    F = 2 Re(Jᴴ J)/σ²,     E|n|² = σ² per complex sample,

with the penalty's curvature added. Source: Kay, Fundamentals of Statistical Signal Processing
(1993).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.quantify.fitted import Fitted
from recon.quantify.gauss_newton import GaussNewton
from recon.quantify.noise import VoxelNoise
from recon.quantify.nuisance import Nuisance
from recon.quantify.patterns import Baseline, Pattern, check_distinct
from recon.result import Cube

FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Fit:
    """Settings.

    Attributes
    ----------
    shift_Hz, decay_per_s, phase_rad
        The nuisances.
    baseline
        Broad signal.
    iterations
        Gauss–Newton steps at most.
    """

    shift_Hz: Nuisance = field(default_factory=lambda: Nuisance(30.0, 3.0))  # noqa: N815
    decay_per_s: Nuisance = field(default_factory=lambda: Nuisance(60.0, 5.0))
    phase_rad: Nuisance = field(default_factory=lambda: Nuisance(0.0))
    baseline: Baseline = field(default_factory=Baseline)
    iterations: int = 12

    def fit(
        self,
        cube: Cube,
        patterns: Sequence[Pattern],
        noise_sd: FloatArray | None = None,
        progress: Callable[[int, int], None] | None = None,
        memory_limit_gib: float = 8.0,
    ) -> Fitted:
        """Fit all voxels.

        Parameters
        ----------
        noise_sd
            Standard deviation of a complex time sample per voxel, (nz, ny, nx), A/m; by default
            from the cube's standard errors. Voxels without (not finite, zero) hold no information.

        Raises
        ------
        InputError
            No pattern, patterns that cannot be told apart, no noise, or memory would not suffice.
        """
        if not patterns:
            raise InputError("there is no pattern to fit", "fit")
        check_distinct(patterns)
        need = self.memory(cube, patterns)
        if need > memory_limit_gib * 2**30:
            raise InputError(
                f"needs about {need / 2**30:.1f} GiB, the limit is {memory_limit_gib:g} GiB",
                "fit",
                "raise the limit, or use fewer voxels or species",
            )
        rules = (self.shift_Hz, self.decay_per_s, self.phase_rad)
        noise = VoxelNoise.of(cube, noise_sd)
        work = GaussNewton(rules, self.baseline, cube, patterns, noise)
        return work.run(self.iterations, progress)

    def memory(self, cube: Cube, patterns: Sequence[Pattern]) -> int:
        """Bytes that a fit takes, roughly: three copies of the cube, and inner products."""
        parts = sum(pattern.courses.shape[1] for pattern in patterns)
        broad = len(self.baseline.decay_ms)
        products = 16 * (3 * parts**2 + 2 * parts * (1 + broad) + broad)
        parameters = 8 * (parts + 2 * broad + 8) + 4 * len(patterns) ** 2
        return int(np.prod(cube.grid.shape)) * (24 * len(cube.values) + products + parameters)
