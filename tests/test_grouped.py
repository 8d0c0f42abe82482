"""Shots with different evolution times: blocks against dense matrices, and the indirect axis."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from recon.basis import all_times, species_basis, time_basis
from recon.demo import instrument
from recon.errors import InputError
from recon.forward import ForwardModel, ForwardOperator
from recon.forward.grouped import GroupedBlocks, accumulate_grouped
from recon.grid import Grid
from recon.planning.tables import VariableDensity
from recon.priors import NonNegative, TotalVariation
from recon.reconstruct import read_statistics, reconstruct
from recon.simulate import simulate
from recon.solvers.penalised import Penalised
from recon.specimen import Species, Specimen
from recon.symbol import Symbol
from recon.unknown import ComplexCube, SpeciesAmounts
from tests.cases import GRID, NOISE, protocol
from tests.cases import instrument as small_instrument

TIMES = np.array([0.0, 5e-3])


def species(name: str, shift: float) -> Species:
    return Species(
        name=name,
        shift_ppm=shift,
        equivalent_nuclei=3,
        t2_star_ms=100.0,
        t1_s=1.0,
        diffusion_um2_per_ms=0.2,
        polarisation=0.05,
    )


PAIR = (species("a", 1.3), species("b", 3.0))


def table(shots: int = 9):
    """Lattice shots with three evolution times."""
    made = protocol(GRID, True, True, (1, 3), shots)
    return replace(made, sample_times=TIMES, evolution_time=np.resize([0.0, 10e-3, 20e-3], shots))


@pytest.mark.parametrize("real", [True, False])
@pytest.mark.parametrize("mode", ["species", "times"])
def test_blocks_equal_the_operators(mode, real):
    """G x, b, value and the exact step against the groups' own operators (dense-tested), summed."""
    made = table()
    times, group = made.evolutions
    apparatus = small_instrument(pixel_um=2.0)

    def basis(t):
        if mode == "species":
            return species_basis(PAIR, apparatus, made, t)
        return time_basis(made, t)

    models = [ForwardModel.build(GRID, apparatus, made, basis(t), NOISE) for t in times]
    operators = [
        ForwardOperator(model.subset(np.flatnonzero(group == g)), np.complex128)
        for g, model in enumerate(models)
    ]
    rng = np.random.default_rng(0)
    shape = operators[0].object_shape
    x = rng.standard_normal(shape) + (0 if real else 1j) * rng.standard_normal(shape)
    x = x * 1e-3
    sample_shape = (len(made), *operators[0].sample_shape[1:])
    y = NOISE * (rng.standard_normal(sample_shape) + 1j * rng.standard_normal(sample_shape))
    batches = [(slice(0, 4), y[:4]), (slice(4, 9), y[4:])]
    quadratic = GroupedBlocks(accumulate_grouped(models, group, batches), real)
    normal, linear, value = 0, 0, 0.0
    for g, operator in enumerate(operators):
        weight = operator.model.encoding.weight[:, None, None, None]
        seen = operator.apply(x.astype(complex))
        normal = normal + operator.adjoint(weight * seen)
        linear = linear + operator.adjoint(weight * y[group == g])
        value += 0.5 * float((weight * np.abs(y[group == g] - seen) ** 2).sum())
    if real:
        normal, linear = normal.real, linear.real
    kind = quadratic.dtype
    scale = np.linalg.norm(normal)
    assert np.linalg.norm(quadratic.normal(x.astype(kind)) - normal) <= 1e-5 * scale
    assert np.linalg.norm(quadratic.linear - linear) <= 1e-5 * np.linalg.norm(linear)
    assert quadratic.value(x.astype(kind)) == pytest.approx(value, rel=1e-5)
    damping = max(quadratic.largest, 1e-3)
    solved = quadratic.step(Symbol(damping))(x.astype(kind))
    back = quadratic.normal(solved) + damping * solved
    assert np.linalg.norm(back - x) <= 1e-4 * np.linalg.norm(x)


def test_all_times_of_an_undersampled_table():
    assert all_times(table()) == pytest.approx([0, 5e-3, 10e-3, 15e-3, 20e-3, 25e-3])
    assert time_basis(table(), 10e-3).argmax(axis=1).tolist() == [2, 3]


@pytest.fixture(scope="module")
def indirect():
    """Two species in two discs; 90 shots over 6 evolution times, one sample each, camera."""
    grid = Grid((1, 32, 32), (4e-6,) * 3)
    made = instrument().model_dump(exclude_none=True)
    made["camera"] = {"pixel_um": 4.0, "field_of_view_um": (128.0, 128.0)}
    apparatus = type(instrument()).model_validate(made)
    y, x = np.mgrid[:64, :64] / 2
    maps = np.zeros((2, 1, 64, 64), np.float32)
    maps[0, 0][(y - 12) ** 2 + (x - 10) ** 2 < 36] = 40
    maps[1, 0][(y - 19) ** 2 + (x - 21) ** 2 < 49] = 60
    specimen = Specimen(grid, PAIR, maps, (1, 2, 2), "invented")
    made = VariableDensity(shots=90).protocol(grid, np.zeros(1))
    made = replace(made, evolution_time=np.resize(np.arange(6) * 12e-3, 90))
    return specimen, simulate(specimen, apparatus, made, seed=1)


def test_indirect_axis_gives_amounts(indirect):
    """Every shot has one t1 only; amounts from the whole (k, t1) table."""
    specimen, record = indirect
    maps = reconstruct(record, None, Penalised((TotalVariation(), NonNegative()), replicas=None))
    truth = specimen.concentrations
    for place in range(2):
        error = np.linalg.norm(maps.values[place] - truth[place]) / np.linalg.norm(truth[place])
        assert error < 0.25
    assert maps.account.misfit == pytest.approx(1.0, abs=0.05)


def test_indirect_axis_gives_a_cube(indirect):
    specimen, record = indirect
    cube = reconstruct(record, ComplexCube(), Penalised((TotalVariation(True),), replicas=None))
    assert cube.sample_times == pytest.approx(np.arange(6) * 12e-3)
    basis = np.concatenate(
        [species_basis(PAIR, record.instrument, record.protocol, t) for t in cube.sample_times]
    )
    true = np.tensordot(basis, specimen.concentrations, 1)
    assert np.linalg.norm(cube.values - true) < 0.35 * np.linalg.norm(true)


def test_groups_keep_bounded_memory_of_the_record(indirect):
    """Statistics do not grow with the number of shots."""
    _, record = indirect
    statistics = read_statistics(record, SpeciesAmounts())
    assert len(statistics.normals) == 6
    assert statistics.linear.shape == (2, 1, 32, 32)


def test_negative_evolution_is_refused():
    with pytest.raises(InputError, match="negative evolution_time"):
        replace(table(), evolution_time=np.full(9, -1e-3))
