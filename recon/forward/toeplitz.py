"""The normal operator off the lattice, without a pass over the shots.

With ideal channels and an even layer, wavevectors off the lattice leave G a function of the
displacement between two voxels: with g_j the circulant kernel of shot j's optics and dipoles,

    G(z, ρ; z', ρ') = Σ_j w_j e^{−i k_j·(ρ − ρ')} g_j(z, z', (ρ − ρ') mod N)

a block Toeplitz matrix, which embeds into blocks over the frequencies of a grid of twice the
size: one padded FFT, small products, one FFT back, exact. Source: Chan & Jin, An Introduction to
Iterative Toeplitz Solvers (2007).
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.forward.block_matrix import BlockMatrix
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel

ComplexArray = NDArray[np.complexfloating]


def is_toeplitz(model: GeneralModel) -> bool:
    """Channels are one per voxel, all there and alike, the layer even, sample times shared."""
    information = model.channels.information
    alike = bool((information == information.flat[0]).all())
    plain = model.window.whole and model.window.binning == (1, 1)
    return alike and plain and model.layer is None and model.courses is None


class ToeplitzNormal:
    """AᴴWA of a model for which `is_toeplitz` holds; applied to (components, nz, ny, nx).

    Takes 8 nz² · 4 ny nx bytes.
    """

    def __init__(self, operator: GeneralOperator) -> None:
        model = operator.model
        self._shape = model.grid.shape
        nz, ny, nx = self._shape
        kernel = np.zeros((nz, nz, 2 * ny, 2 * nx), np.complex64)
        for shot, weight in enumerate(model.weight):
            _add_shot(operator, shot, float(weight * model.channels.information.flat[0]), kernel)
        blocks = scipy.fft.fft2(kernel, overwrite_x=True)
        for row in range(nz):
            blocks[row + 1 :, row] = blocks[row, row + 1 :].conj()
        components = operator.object_shape[0]
        self._matrix = BlockMatrix(blocks.reshape(1, nz, nz, -1), components)
        self._gram = model.gram(0).astype(np.complex64)

    def __call__(self, objects: ComplexArray) -> ComplexArray:
        """AᴴWA x, complex64."""
        _, ny, nx = self._shape
        double = (2 * ny, 2 * nx)
        spectrum = scipy.fft.fft2(objects.astype(np.complex64, copy=False), double)
        flat = spectrum.reshape(1, *spectrum.shape[:2], -1)
        product = self._matrix.multiply(flat).reshape(spectrum.shape)
        image = scipy.fft.ifft2(product, overwrite_x=True)[..., :ny, :nx]
        return np.asarray(np.tensordot(self._gram, image, 1))


def _add_shot(operator: GeneralOperator, shot: int, weight: float, kernel: ComplexArray) -> None:
    """Add one shot's kernel over displacements 0 … N − 1, −N … −1, upper triangle in z."""
    model, tables = operator.model, operator.tables
    nz, ny, nx = model.grid.shape
    response = tables.kernels(shot)[0] * (tables.response(shot) * np.float32(np.sqrt(weight)))
    response = np.fft.ifftshift(response, axes=(1, 2))
    phases = []
    for axis, count in enumerate((ny, nx)):
        place = np.concatenate([np.arange(count), np.arange(-count, 0)])
        phases.append(np.exp(-1j * model.nuclear[shot, axis] * model.grid.voxel[1 + axis] * place))
    phase = (phases[0][:, None] * phases[1]).astype(np.complex64)
    for row in range(nz):
        circulant = scipy.fft.ifft2(response[row].conj() * response[row:])
        kernel[row, row:] += np.tile(circulant, (1, 2, 2)) * phase
