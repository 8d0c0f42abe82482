"""sigpy's stock solvers: accelerated proximal gradient, primal–dual, ADMM.

In wavelet coefficients c = W x (W is unitary), where all three take the prior's prox directly; the
step sizes come from the exact largest eigenvalue, so no time goes into estimating it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import sigpy as sp
from judge import Trace
from pieces import Pieces
from sigpy.app import LinearLeastSquares

from recon.forward import ForwardOperator
from recon.forward.linop import ForwardLinop
from recon.priors.base import Term


class Gather(sp.linop.Linop):  # type: ignore[misc]
    """Σ_z h_j(z) X_z(κ'_j): indexing, which the library has no piece for."""

    def __init__(self, shape: tuple[int, ...], rows: np.ndarray, places: np.ndarray) -> None:
        self.rows, self.places, self.shape = rows, places, shape
        super().__init__((len(rows),), shape)

    def _apply(self, spectrum: np.ndarray) -> np.ndarray:
        flat = spectrum.reshape(self.shape[0], -1)
        return np.einsum("jz,zj->j", self.rows, flat[:, self.places])

    def _adjoint_linop(self) -> Any:
        return _Spread(self)


class _Spread(sp.linop.Linop):  # type: ignore[misc]
    def __init__(self, gather: Gather) -> None:
        self.gather = gather
        super().__init__(gather.shape, (len(gather.rows),))

    def _apply(self, values: np.ndarray) -> np.ndarray:
        flat = np.zeros((np.prod(self.gather.shape[1:]), self.gather.shape[0]), np.complex64)
        np.add.at(flat, self.gather.places, self.gather.rows.conj() * values[:, None])
        return flat.T.reshape(self.gather.shape)

    def _adjoint_linop(self) -> Any:
        return self.gather


class Wavelets(sp.linop.Linop):  # type: ignore[misc]
    """Wᴴ of the periodised transform (the library's own pads with zeros, so is not unitary)."""

    def __init__(self, term: Term, shape: tuple[int, ...], back: bool = True) -> None:
        self.term, self.back = term, back
        super().__init__(shape, shape)

    def _apply(self, values: np.ndarray) -> np.ndarray:
        return self.term.adjoint(values) if self.back else self.term.analyse(values)

    def _adjoint_linop(self) -> Any:
        return Wavelets(self.term, self.oshape, not self.back)


def composed(pieces: Pieces) -> Any:
    """A from the library's own pieces."""
    fft = sp.linop.FFT(pieces.shape, axes=(-2, -1), center=False)
    if pieces.one_detector:
        return Gather(pieces.shape, *pieces.rows()) * fft
    plane = pieces.shape[1:]
    inverse = sp.linop.IFFT(plane, center=False)
    shots = []
    for shot in pieces.shots():
        shift = sp.linop.Circshift(pieces.shape, shot.shift, axes=(-2, -1))
        kernel = sp.linop.Multiply(pieces.shape, shot.kernel)
        total = sp.linop.Sum(pieces.shape, axes=(0,))
        chain = inverse * sp.linop.Multiply(plane, shot.transfer) * total * kernel * shift
        if pieces.alive is not None:
            chain = sp.linop.Multiply(plane, pieces.alive) * chain
        shots.append(chain)
    return sp.linop.Vstack(shots, axis=0) * fft


Run = Callable[[Trace], None]


def runs(
    pieces: Pieces, term: Term, threshold: np.ndarray, largest: float
) -> Iterator[tuple[str, Run, float]]:
    """Name, run, and check of each solver on the operator composed by a user."""
    A = composed(pieces)
    off = pieces.check(A)
    wavelets = Wavelets(term, pieces.shape)
    y = pieces.y.ravel() if pieces.one_detector else pieces.y.reshape(-1, pieces.shape[-1])
    yield from _solvers("sigpy", A * wavelets, y, wavelets, threshold, largest, off)


def runs_with_blocks(
    pieces: Pieces, term: Term, threshold: np.ndarray, largest: float
) -> Iterator[tuple[str, Run, float]]:
    """The same solvers on our operator, which offers its blocks as normal operator."""
    forward = ForwardLinop(ForwardOperator(pieces.model))
    wavelets = Wavelets(term, forward.ishape)
    scaled = forward * sp.linop.Multiply(forward.ishape, pieces.factor)

    class Whole(sp.linop.Linop):  # type: ignore[misc]
        """A W⁻¹ whose normal operator goes through the blocks."""

        def __init__(self) -> None:
            super().__init__(forward.oshape, forward.ishape)

        def _apply(self, c: np.ndarray) -> np.ndarray:
            return scaled(wavelets(c))

        def _adjoint_linop(self) -> Any:
            return wavelets.H * scaled.H

        def _normal_linop(self) -> Any:
            square = sp.linop.Multiply(forward.ishape, pieces.factor**2)
            return wavelets.H * square * forward.N * wavelets

    y = pieces.y.reshape(forward.oshape)
    solvers = _solvers("sigpy + blocks", Whole(), y, wavelets, threshold[None], largest, 0.0)
    for name, run, off in solvers:
        if "primal" not in name:  # which never uses the normal operator
            yield name, run, off


def _solvers(
    label: str,
    A: Any,
    y: np.ndarray,
    wavelets: Any,
    threshold: np.ndarray,
    largest: float,
    off: float,
) -> Iterator[tuple[str, Run, float]]:
    prox = sp.prox.L1Reg(A.ishape, threshold)
    settings = {
        "proximal gradient": {"solver": "GradientMethod", "alpha": 1 / largest},
        "primal-dual": {
            "solver": "PrimalDualHybridGradient",
            "tau": 3 / largest**0.5,
            "sigma": 1 / (3 * largest**0.5),
        },
        "ADMM": {"solver": "ADMM", "rho": 0.3, "max_cg_iter": 10},
    }
    for name, how in settings.items():

        def run(trace: Trace, how: dict[str, Any] = how) -> None:
            app = LinearLeastSquares(
                A, y.copy(), proxg=prox, max_iter=10000, show_pbar=False, **how
            )
            while not app.alg.done():
                app.alg.update()
                trace.look(wavelets(getattr(app.alg, "z", app.x) if "ADMM" in str(how) else app.x))

        yield f"{label} {name}", run, off
