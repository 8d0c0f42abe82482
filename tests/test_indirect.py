"""Tables with an indirect spectral axis, as rules and from the command line."""

from __future__ import annotations

import numpy as np
import pytest

from recon.basis import all_times, magnetisation_per_mM, time_course
from recon.cli import main
from recon.errors import InputError
from recon.grid import Grid
from recon.planning.indirect import Evolutions, undersampling
from recon.planning.tables import VariableDensity
from recon.priors import LocalLowRank, TotalVariation
from recon.protocol import Protocol, SpectralAxis
from recon.reconstruct import default_estimator, reconstruct
from recon.simulate import simulate
from recon.solvers.penalised import Penalised
from recon.specimen import Specimen
from recon.unknown import ComplexCube
from tests.test_agreement_of_modes import LINES, apparatus

GRID = Grid((1, 24, 24), (4e-6,) * 3)
TIMES = tuple(np.arange(8) * 5e-3)


def table(shots=96):
    axis = SpectralAxis.EVOLVE_THEN_ENCODE
    return VariableDensity(shots=shots).protocol(GRID, np.zeros(1), spectral_axis=axis)


def test_times_are_shared_evenly():
    made = Evolutions(TIMES).spread_over(table())
    times, counts = np.unique(made.evolution_time, return_counts=True)
    np.testing.assert_allclose(times, TIMES)
    assert counts.tolist() == [12] * 8
    np.testing.assert_array_equal(made.nuclear_wavevector, table().nuclear_wavevector)
    assert abs(np.corrcoef(made.evolution_time[1:], made.evolution_time[:-1])[0, 1]) < 0.35
    assert undersampling(made, 576) == pytest.approx(576 * 8 / 96)


def test_each_wavevector_gets_different_times():
    made = Evolutions(TIMES, per_wavevector=3).spread_over(table(40))
    assert len(made) == 120
    groups = made.evolution_time.reshape(40, 3)
    assert (np.diff(groups, axis=1) > 0).all()
    np.testing.assert_array_equal(made.nuclear_wavevector[::3], made.nuclear_wavevector[2::3])
    np.testing.assert_allclose(np.diff(made.clock_time), 1.0)
    counts = np.unique(made.evolution_time, return_counts=True)[1]
    assert counts.max() - counts.min() <= 2


def test_late_times_are_drawn_less():
    """exp(−t1/τ) to within one shot."""
    made = Evolutions(TIMES, decay=15e-3).spread_over(table())
    weight = np.exp(-np.array(TIMES) / 15e-3)
    counts = [(made.evolution_time == time).sum() for time in TIMES]
    np.testing.assert_allclose(counts, 96 * weight / weight.sum(), atol=1.01)


@pytest.mark.parametrize(
    "arguments, told",
    [
        (((),), "finite"),
        (((0.0, -1e-3),), "ascend"),
        (((-1e-3,),), "not negative"),
        (((0.0, 1e-3), 3), "use 1 to 2"),
        (((0.0,), 1, 0.0), "positive"),
    ],
)
def test_bad_tables(arguments, told):
    with pytest.raises(InputError, match=told):
        Evolutions(*arguments)


@pytest.fixture
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    apparatus().to_toml("instrument.toml")
    maps = np.zeros((3, *GRID.shape), np.float32)
    Specimen(GRID, LINES, maps, notes="invented").save("specimen.toml")
    return tmp_path


def made(*more):
    main(["protocol", "specimen.toml", "instrument.toml", *more])
    return Protocol.load("protocol.h5")


def test_verb_makes_an_indirect_table(folder, capsys):
    more = ["--samples", "1", "--shots", "60", "--encoding-ms", "1.5"]
    one = made(*more, "--evolution-ms", "0,5,10")
    assert "60 shots, 28.8 times fewer" in capsys.readouterr().out
    np.testing.assert_allclose(one.evolutions[0], [0, 5e-3, 10e-3])
    assert one.encoding_duration == pytest.approx(1.5e-3)
    assert not one.listens
    two = made(*more, "--evolution-ms", "0:4:6", "--evolutions-per-wavevector", "2")
    np.testing.assert_allclose(two.evolutions[0], np.arange(6) * 4e-3)
    assert len(np.unique(two.nuclear_wavevector, axis=0)) == 30


def test_listening_begins_after_the_pulse(folder):
    table = made("--listen", "--encoding-ms", "2", "--samples", "4", "--sample-interval-ms", "3")
    np.testing.assert_allclose(table.sample_times, [2e-3, 5e-3, 8e-3, 11e-3])
    assert table.wound_times()[0] == pytest.approx(0)


def test_an_indirect_cube_is_better_for_low_rank():
    """Against the exact cube; 16 evolution times, 10 wavevectors each of 576."""
    maps = np.zeros((3, *GRID.shape), np.float32)
    maps[:2, :, 3:21, 3:21], maps[2, :, 12:22, 4:14] = [[[[40]]], [[[60]]]], 50
    axis = SpectralAxis.EVOLVE_THEN_ENCODE
    rule = VariableDensity(shots=160)
    protocol = rule.protocol(GRID, np.zeros(1), averages=16, spectral_axis=axis)
    protocol = Evolutions(tuple(np.arange(16) * 8e-3)).spread_over(protocol)
    record = simulate(Specimen(GRID, LINES, maps, notes="invented"), apparatus(), protocol, seed=1)
    times = all_times(protocol)
    courses = [time_course(one, apparatus(), times, 4.7) for one in LINES]
    truth = np.tensordot(np.stack(courses, 1) * magnetisation_per_mM(LINES, apparatus()), maps, 1)
    default = default_estimator(ComplexCube(), record)
    assert default.priors == (TotalVariation(joint=True), LocalLowRank())
    errors = [
        np.linalg.norm(
            reconstruct(record, ComplexCube(), Penalised(p, replicas=None)).values - truth
        )
        for p in (default.priors, default.priors[:1])
    ]
    assert errors[0] < 0.95 * errors[1] < 0.13 * np.linalg.norm(truth)


@pytest.mark.parametrize(
    "more, told",
    [
        (("--evolution-ms", "0,x"), "no list of times"),
        (("--evolution-ms", "0:5"), "start:step:count"),
        (("--evolution-ms", "5,0"), "ascend"),
        (("--encoding-ms", "-1"), "not be negative"),
    ],
)
def test_verb_refuses(folder, capsys, more, told):
    with pytest.raises(SystemExit) as leaving:
        made(*more)
    assert leaving.value.code == 2
    error = capsys.readouterr().err
    assert told in error and error.count("\n") == 1
