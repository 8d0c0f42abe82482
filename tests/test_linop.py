"""The operator inside sigpy: adjoint, normal operator by blocks, and a stock app."""

from __future__ import annotations

import numpy as np
import pytest
import sigpy

from recon.forward import ForwardOperator
from recon.forward.linop import ForwardLinop
from recon.symbol import Symbol
from tests.cases import registry

CASES = [case for case in registry() if "decays" in case.name or "identity" in case.name][::7]


@pytest.mark.parametrize("case", CASES, ids=[case.name for case in CASES])
def test_normal_operator_by_blocks_is_the_composition(case):
    linop = ForwardLinop(ForwardOperator(case.model))
    rng = np.random.default_rng(0)
    x = rng.standard_normal(linop.ishape) + 1j * rng.standard_normal(linop.ishape)
    x = x.astype(np.complex64)
    composed = linop.H(linop(x))
    scale = np.linalg.norm(composed)
    assert np.linalg.norm(linop.N(x) - composed) <= 2e-6 * scale


def test_stock_least_squares_meets_the_exact_ridge():
    case = next(c for c in registry() if c.name.startswith("fine camera, nuclear sensor"))
    linop = ForwardLinop(ForwardOperator(case.model))
    rng = np.random.default_rng(1)
    x = rng.standard_normal(linop.ishape).astype(np.complex64)
    y = linop(x)
    y = y + (0.1 * np.std(y) * rng.standard_normal(y.shape)).astype(np.complex64)
    damping = 0.1 * linop.blocks().largest
    app = sigpy.app.LinearLeastSquares(linop, y, lamda=damping, max_iter=300, show_pbar=False)
    exact = linop.blocks().step(Symbol(damping))(linop.H(y))
    assert np.linalg.norm(app.run() - exact) < 1e-4 * np.linalg.norm(exact)
