"""Ridge regression, solved exactly, with its weight, errors and resolution in closed form.

    x̂ = (G + λ)⁻¹ b

In the eigenbasis of the blocks of G everything is a sum over eigenvalues. The weight minimises
Stein's unbiased estimate of the error of the predicted samples (Stein, Annals of Statistics
9:1135, 1981),

    ‖W^{1/2}(y − A x̂)‖² − N + Σ e/(e + λ) · (2 for a complex, 1 for a real unknown).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.forward.blocks import BlockQuadratic
from recon.priors.base import Frame
from recon.solvers.estimate import Estimate, Progress, silent
from recon.solvers.loop import Reason
from recon.solvers.resolution import PointResponse, resting_on_prior
from recon.symbol import Symbol

Array = NDArray[np.inexact]
FloatArray = NDArray[np.floating]


@dataclass(frozen=True)
class Ridge:
    """Small amounts everywhere: a Gaussian prior of equal variance for every voxel.

    Attributes
    ----------
    weight
        λ in units of the mean diagonal of G, or None to choose it from the data.
    """

    weight: float | None = None

    def __str__(self) -> str:
        return "small and without structure (ridge)"

    def estimate(
        self, quadratic: BlockQuadratic, frame: Frame, progress: Progress = silent
    ) -> Estimate:
        """Solve, with the exact standard error of every value."""
        weight = chosen_weight(quadratic) if self.weight is None else self.weight
        step = quadratic.step(Symbol(weight))
        x = step(quadratic.linear)
        responses = PointResponse().measure(quadratic, frame.voxel, step)
        return Estimate(
            x=x,
            standard_error=standard_error(quadratic, weight),
            weights={"ridge": weight},
            reason=Reason.DIRECT,
            misfit=quadratic.misfit(x),
            resolution=responses.width,
            remarks=(
                "standard errors are those of the noise; detail that the weight suppresses is not "
                "in them",
                *resting_on_prior(responses.recovered),
            ),
        )


def chosen_weight(quadratic: BlockQuadratic) -> float:
    """The weight with the least estimated error of prediction, on a fine logarithmic grid."""
    values, power, multiplicity = _spectral(quadratic)
    top = float(values.max())
    candidates = np.geomspace(1e-7 * top, 10 * top, 161)
    dimensions = 1 if quadratic.real else 2
    risk = [
        np.sum(power * (values / (values + c) - 2) / (values + c))
        + dimensions * np.sum(multiplicity * values / (values + c))
        for c in candidates
    ]
    return float(candidates[int(np.argmin(risk))])


def standard_error(quadratic: BlockQuadratic, weight: float) -> FloatArray:
    """Square root of the diagonal of (G + λ)⁻¹ G (G + λ)⁻¹, halved for a real unknown.

    The diagonal is the same for all voxels of a plane; it is spread over (components, z, y, x).
    """
    inverse = quadratic.matrix.shifted(weight).inverse()
    product = np.matmul(inverse.per_block, quadratic.matrix.per_block)
    covariance = np.matmul(product, inverse.per_block)
    variance = quadratic.plane_mean(covariance) * (0.5 if quadratic.real else 1.0)
    error = np.sqrt(np.maximum(variance, 0)).astype(np.float32)
    return np.broadcast_to(error[..., None, None], quadratic.shape).copy()


def _spectral(quadratic: BlockQuadratic) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Eigenvalues (groups, blocks, q), |projections of b|² and multiplicities, same shape."""
    values, vectors = quadratic.spectrum
    b = quadratic.to_blocks(quadratic.linear) / np.sqrt(np.prod(quadratic.shape[-2:]))
    projected = np.einsum("gkqe,gbqk->gbke", vectors.conj(), b, optimize=True)
    weights = quadratic.half_weights()[None, :, None]
    power = (np.abs(projected) ** 2).sum(axis=1) * weights
    values = np.maximum(values.astype(float), 0)
    return values, power, np.broadcast_to(weights * quadratic.matrix.batch, values.shape)
