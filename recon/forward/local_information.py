"""How much of the ideal information reaches every voxel, where channels and layer are not ideal."""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.forward.general import GeneralOperator

FloatArray = NDArray[np.floating]


def local_information(operator: GeneralOperator) -> FloatArray:
    """Diagonal of AᴴWA over that of ideal channels and an even layer, (nz, ny, nx) float32.

    The voxel at (z, ρ) is seen by the channel at p with power Σ_j w_j |h_j(z, p − ρ)|², h_j the
    point response; its information is the mean of |g|² v, and of the squared density, over what
    sees it. Exact where a pixel is one voxel and the layer even; shared by all components.
    """
    model, tables = operator.model, operator.tables
    window = model.window
    seen = window.fill(model.channels.information.astype(complex)).real
    seen = seen.repeat(window.binning[0], 0).repeat(window.binning[1], 1)
    if model.layer is not None:
        seen = seen * model.layer.density**2
    power = np.zeros(model.grid.shape)
    for shot, weight in enumerate(model.weight):
        point = scipy.fft.ifft2(tables.kernels(shot)[0] * tables.response(shot))
        power += weight * (point.real**2 + point.imag**2)
    total = np.maximum(power.sum(axis=(1, 2)), np.finfo(float).tiny)
    local = scipy.fft.ifft2(scipy.fft.fft2(seen) * scipy.fft.fft2(power).conj()).real
    return np.maximum(local / total[:, None, None], 0).astype(np.float32)
