"""pyproximal's stock solvers on an operator composed of pylops' pieces.

In wavelet coefficients, as for the other library; step sizes from the exact largest eigenvalue.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import pylops
import pyproximal
import scipy.sparse
from judge import Trace
from pieces import Pieces
from pyproximal.optimization.primal import ADMM, AcceleratedProximalGradient
from pyproximal.optimization.primaldual import PrimalDual

from recon.priors.base import Term

Run = Callable[[Trace], None]


class Shrink(pyproximal.ProxOperator):  # type: ignore[misc]
    """Weighted ℓ1 norm: the library's own takes one weight, the coarse coefficients have none."""

    def __init__(self, threshold: np.ndarray) -> None:
        super().__init__(None, False)
        self.threshold = threshold.ravel()

    def __call__(self, c: np.ndarray) -> float:
        return float((self.threshold * np.abs(c)).sum())

    def prox(self, c: np.ndarray, tau: float) -> np.ndarray:
        size = np.maximum(np.abs(c), np.finfo(np.float32).tiny)
        return c * np.maximum(1 - np.float32(tau) * self.threshold / size, 0)


class Wavelets(pylops.LinearOperator):  # type: ignore[misc]
    """Wᴴ, periodised."""

    def __init__(self, term: Term, shape: tuple[int, ...]) -> None:
        self.term, self.whole = term, shape
        size = int(np.prod(shape))
        super().__init__(dtype=np.dtype(np.complex64), shape=(size, size))

    def _matvec(self, c: np.ndarray) -> np.ndarray:
        return self.term.adjoint(c.reshape(self.whole)).ravel()

    def _rmatvec(self, x: np.ndarray) -> np.ndarray:
        return self.term.analyse(x.reshape(self.whole)).ravel()


def composed(pieces: Pieces) -> Any:
    """A from the library's own pieces."""
    kind = {"dtype": np.complex64}
    fft = pylops.signalprocessing.FFT2D(
        pieces.shape, axes=(-2, -1), norm="ortho", engine="scipy", **kind
    )
    nz, ny, nx = pieces.shape
    if pieces.one_detector:
        rows, places = pieces.rows()
        columns = np.arange(nz) * (ny * nx) + places[:, None]
        count = np.repeat(np.arange(len(rows)), nz)
        table = scipy.sparse.csr_matrix(
            (rows.ravel(), (count, columns.ravel())), (len(rows), nz * ny * nx)
        )
        return pylops.MatrixMult(table, **kind) * fft
    inverse = pylops.signalprocessing.FFT2D((ny, nx), norm="ortho", engine="scipy", **kind).H
    total = pylops.Sum(pieces.shape, axis=0, **kind)
    kernels: dict[int, Any] = {}
    shots = []
    for shot in pieces.shots():
        kernel = kernels.setdefault(id(shot.kernel), pylops.Diagonal(shot.kernel.ravel(), **kind))
        chain = total * kernel
        for axis, steps in zip((1, 2), shot.shift, strict=True):
            if steps:
                chain = chain * pylops.Roll(pieces.shape, axis=axis, shift=steps, **kind)
        chain = inverse * pylops.Diagonal(shot.transfer.ravel(), **kind) * chain
        if pieces.alive is not None:
            chain = pylops.Diagonal(pieces.alive.ravel().astype(np.complex64), **kind) * chain
        shots.append(chain)
    return pylops.VStack(shots, **kind) * fft


def runs(
    pieces: Pieces, term: Term, threshold: np.ndarray, largest: float
) -> Iterator[tuple[str, Run, float]]:
    """Name, run, and check of each solver."""
    A = composed(pieces)
    off = pieces.check(lambda x: A @ x.ravel())
    wavelets = Wavelets(term, (1, *pieces.shape))
    Op, y = A * wavelets, pieces.y.ravel()
    shrink, start = Shrink(threshold), np.zeros(Op.shape[1], np.complex64)

    def gradient(trace: Trace) -> None:
        AcceleratedProximalGradient(
            pyproximal.L2(Op=Op, b=y),
            shrink,
            start.copy(),
            tau=1 / largest,
            niter=10000,
            callback=lambda c: trace.look(wavelets @ c),
        )

    def primal_dual(trace: Trace) -> None:
        PrimalDual(
            shrink,
            pyproximal.L2(b=y),
            Op,
            start.copy(),
            tau=3 / largest**0.5,
            mu=1 / (3 * largest**0.5),
            niter=10000,
            callback=lambda c: trace.look(wavelets @ c),
        )

    def admm(trace: Trace) -> None:
        data = pyproximal.L2(Op=Op, b=y, niter=10, warm=True)
        ADMM(
            data,
            shrink,
            start.copy(),
            tau=3.0,
            niter=10000,
            callbackz=True,
            callback=lambda c, z: trace.look(wavelets @ z),
        )

    for name, run in (
        ("proximal gradient", gradient),
        ("primal-dual", primal_dual),
        ("ADMM", admm),
    ):
        yield f"pylops {name}", run, off
