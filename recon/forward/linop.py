"""The forward operator as a linear operator of sigpy, for use in that library's apps.

Imported on demand: sigpy takes seconds to load.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from sigpy.linop import Linop

from recon.forward.blocks import BlockQuadratic
from recon.forward.normal import normal_blocks
from recon.forward.operator import ForwardOperator
from recon.forward.statistics import Statistics

ComplexArray = NDArray[np.complexfloating]


class ForwardLinop(Linop):  # type: ignore[misc]
    """A, whitened by the square root of the shots' weights: W^{1/2} A.

    Its adjoint is Aᴴ W^{1/2} and its normal operator AᴴWA is applied by blocks, without a pass
    over the shots, so that gradient methods of the library profit too.
    """

    def __init__(self, operator: ForwardOperator) -> None:
        self.operator = operator
        self._root = np.sqrt(operator.model.encoding.weight).astype(np.float32)
        super().__init__(operator.sample_shape, operator.object_shape, repr_str="Forward")

    def whiten(self, samples: ComplexArray) -> ComplexArray:
        """W^{1/2} y."""
        return samples * self._root[:, None, None, None]

    def blocks(self) -> BlockQuadratic:
        """The normal operator's blocks, with b = 0."""
        layout, normal = normal_blocks(self.operator)
        basis = self.operator.model.basis
        empty = np.zeros(self.operator.object_shape, np.complex64)
        gram = basis.conj().T @ basis
        grid = self.operator.model.grid
        return BlockQuadratic(Statistics(grid, layout, empty, normal, gram, 0.0, 1), real=False)

    def _apply(self, objects: ComplexArray) -> ComplexArray:
        return self.whiten(self.operator.apply(objects))

    def _adjoint_linop(self) -> Linop:
        return _Adjoint(self)

    def _normal_linop(self) -> Linop:
        return _Normal(self)


class _Adjoint(Linop):  # type: ignore[misc]
    def __init__(self, forward: ForwardLinop) -> None:
        self._forward = forward
        super().__init__(forward.ishape, forward.oshape, repr_str="ForwardAdjoint")

    def _apply(self, samples: ComplexArray) -> ComplexArray:
        return self._forward.operator.adjoint(self._forward.whiten(samples))

    def _adjoint_linop(self) -> Linop:
        return self._forward


class _Normal(Linop):  # type: ignore[misc]
    def __init__(self, forward: ForwardLinop) -> None:
        self._quadratic = forward.blocks()
        super().__init__(forward.ishape, forward.ishape, repr_str="ForwardNormal")

    def _apply(self, objects: ComplexArray) -> Any:
        return self._quadratic.normal(objects)

    def _adjoint_linop(self) -> Linop:
        return self
