"""Species that cannot be told apart: correlation, condition, bounds, by name."""

from __future__ import annotations

import numpy as np
import pytest

from recon.basis import species_basis
from recon.demo import instrument
from recon.errors import InputError, InputWarning
from recon.forward.diffusing import DiffusingOperator, JointStatistics, joint_blocks
from recon.forward.diffusing_model import DiffusingModel
from recon.forward.grouped import accumulate_grouped
from recon.forward.model import ForwardModel
from recon.forward.statistics import accumulate
from recon.protocol import Protocol
from recon.separability import Separability
from recon.spreading import StandingMap
from tests.cases import GRID, NOISE, protocol
from tests.cases import instrument as small_instrument
from tests.test_band import species

TIMES = np.arange(128) * 4e-3
NAMES = ("lactate", "lipid", "creatine")
TRIO = (
    species("lactate", 1.31, equivalent_nuclei=4, spin_system="lactate", t2_star_ms=150.0),
    species("lipid", 1.30, diffusion_um2_per_ms=0.01),
    species("creatine", 3.03),
)


def basis(field_mT=250.0, trio=TRIO):
    apparatus = instrument().model_copy(update={"bias_field_mT": (0.0, 0.0, field_mT)})
    made = Protocol.plain(np.zeros((1, 3)), np.zeros((1, 2)), 1, TIMES)
    return species_basis(trio, apparatus, made)


def test_bound_and_condition_against_a_design_matrix():
    """numpy's least squares on stacked real and imaginary parts."""
    phi, sigma = basis(), 3e-7
    found = Separability.of_basis(NAMES, phi, sigma)
    design = np.concatenate([phi.real, phi.imag])
    covariance = np.linalg.inv(design.T @ design) * sigma**2 / 2
    assert found.standard_error == pytest.approx(np.sqrt(np.diag(covariance)), rel=1e-9)
    unit = design / np.linalg.norm(design, axis=0)
    assert found.condition == pytest.approx(np.linalg.cond(unit) ** 2, rel=1e-6)


def test_bound_is_met_by_repeated_fits():
    """Scatter of 4000 noisy fits."""
    phi, sigma = basis(), 3e-7
    rng = np.random.default_rng(0)
    noise = rng.standard_normal((2 * len(phi), 4000)) * sigma / np.sqrt(2)
    design = np.concatenate([phi.real, phi.imag])
    scatter = np.linalg.lstsq(design, noise, rcond=None)[0].std(axis=1)
    found = Separability.of_basis(NAMES, phi, sigma)
    assert scatter == pytest.approx(found.standard_error, rel=0.05)


def test_worst_pair_is_named_with_the_condition_number():
    """Lactate without its coupling is the lipid's twin; with it the pair is told apart."""
    twin = TRIO[0].model_copy(update={"spin_system": None, "t2_star_ms": 200.0})
    alike = Separability.of_basis(NAMES, basis(trio=(twin, *TRIO[1:])), 1e-7)
    apart = Separability.of_basis(NAMES, basis(), 1e-7)
    assert alike.worst_pair == ("lactate", "lipid")
    assert alike.condition > 100 * apart.condition
    with pytest.warns(InputWarning, match=r"lactate and lipid cannot be told apart.*condition"):
        alike.warn(expected=1e-3)
    assert apart.confused(expected=0.0) == []
    assert alike.confused(expected=np.inf) == []


def test_same_species_twice_is_no_crash():
    phi = basis()[:, [0, 0]]
    found = Separability.of_basis(("a", "b"), phi, 1e-7)
    assert found.condition == np.inf
    assert found.confusion.min() > 1e6


def test_a_species_without_signal_is_named():
    phi = basis().copy()
    phi[:, 1] = 0
    with pytest.raises(InputError, match="lipid leaves no signal"):
        Separability.of_basis(NAMES, phi)


def test_diffusion_tells_twins_apart():
    """Equal lines: without diffusion the Gram matrix is singular, with it it is not."""
    twins = (
        species("a", 1.3, diffusion_um2_per_ms=0.1),
        species("b", 1.3, diffusion_um2_per_ms=0.002),
    )
    made = protocol(GRID, True, False, (1,), 6)
    model = DiffusingModel.build(
        GRID, small_instrument(pixel_um=2.0), made, twins, NOISE, StandingMap()
    )

    def gram(diffusing):
        operator = DiffusingOperator(diffusing)
        layout, normal = joint_blocks(operator)
        linear = np.zeros(operator.object_shape, np.complex64)
        return JointStatistics(GRID, layout, linear, normal, 0.0, 1).spectral_gram()

    still = DiffusingModel(
        model.base, model.bases, model.wound_times, model.group, np.zeros(2), 0.0, StandingMap()
    )
    assert Separability(("a", "b"), gram(still)).condition > 1e5
    assert Separability(("a", "b"), gram(model)).condition < 100


def test_statistics_of_all_kinds_give_the_same_matrix():
    """The plain, the grouped and the joint statistics of one still record."""
    pair = (
        species("a", 1.3, diffusion_um2_per_ms=0.0),
        species("b", 3.1, diffusion_um2_per_ms=0.0),
    )
    made = protocol(GRID, True, True, (1, 3), 4)
    apparatus = small_instrument(pixel_um=2.0)
    phi = species_basis(pair, apparatus, made)
    model = ForwardModel.build(GRID, apparatus, made, phi, NOISE)
    shape = (4, len(made.sample_times), *model.channels)
    y = [(slice(0, 4), np.ones(shape, np.complex64) * NOISE)]
    plain = accumulate(model, y).spectral_gram()
    grouped = accumulate_grouped([model], np.zeros(4, int), y).spectral_gram()
    diffusing = DiffusingModel.build(GRID, apparatus, made, pair, NOISE)
    operator = DiffusingOperator(diffusing)
    layout, normal = joint_blocks(operator)
    linear = np.zeros(operator.object_shape, np.complex64)
    joint = JointStatistics(GRID, layout, linear, normal, 0.0, 1).spectral_gram()
    np.testing.assert_allclose(grouped, plain, rtol=1e-4)
    np.testing.assert_allclose(joint, plain, rtol=1e-4)
