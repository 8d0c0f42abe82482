"""The bound against Monte-Carlo; the choice against brute force; trains and limits by hand."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from recon.demo import instrument
from recon.errors import InputError
from recon.forward import ForwardOperator, accumulate
from recon.forward.block_matrix import BlockMatrix
from recon.grid import Grid
from recon.planning.bound import Bound, Expectation, Experiment, full_width
from recon.planning.candidates import Candidates, Kind, camera_kinds, detector_kinds
from recon.planning.choice import (
    Budget,
    Choice,
    MeanError,
    WorstError,
    information_of,
)
from recon.planning.limits import Limits
from recon.planning.relaxed import lower_bound
from recon.planning.scores import Scores
from recon.planning.tables import UniformRandom, VariableDensity
from recon.planning.trains import AncillaReadout, Hyperpolarised, Thermal, in_train
from recon.protocol import Protocol
from recon.specimen import Species

MICRON = 1e-6
GRID = Grid((3, 16, 16), (4 * MICRON,) * 3)
TIMES = np.arange(8) * 8e-3
SPECIES = tuple(
    Species(
        name=name,
        shift_ppm=shift,
        equivalent_nuclei=3,
        t2_star_ms=100.0,
        t1_s=1.0,
        diffusion_um2_per_ms=0.2,
        polarisation=0.01,
    )
    for name, shift in (("a", 1.3), ("b", 3.0))
)


def apparatus(one_detector: bool = False, pixel_um: float = 4.0):
    made = instrument()
    view = {"field_of_view_um": (64.0, 64.0)}
    data = made.model_dump(exclude_none=True)
    data.pop("camera")
    detector = {"one_detector": view} if one_detector else {"camera": view | {"pixel_um": pixel_um}}
    return type(made).model_validate(data | detector)


def experiment(one_detector=False, species=SPECIES[:1], spread=20.0, pixel_um=4.0, axial=0.0):
    expectation = Expectation((spread,) * len(species), 12.0, axial)
    return Experiment(apparatus(one_detector, pixel_um), GRID, species, expectation)


def table(shots: int = 40, axial: float = 0.3) -> Protocol:
    return UniformRandom(shots=shots, axial_bound_rad_per_um=axial, seed=2).protocol(GRID, TIMES)


@pytest.mark.parametrize(
    "species, axial", [(SPECIES[:1], 0.0), (SPECIES, 0.0), (SPECIES[:1], 20.0)]
)
def test_bound_agrees_with_monte_carlo(species, axial):
    """Random objects of the prior, noisy records, the linear estimate: within 5 % per depth."""
    setting, protocol = experiment(species=species), table()
    expected = replace(setting.expectation, axial_feature_um=axial)
    setting = replace(setting, expectation=expected)
    along = np.linalg.cholesky(expected.axial_covariance(GRID))
    bound = Bound.of(setting, protocol)
    model = setting.model(protocol)
    operator, unit = ForwardOperator(model), bound.unit
    inverse = np.linalg.inv(bound._with_prior()).transpose(0, 2, 3, 1).astype(np.complex64)
    estimate = BlockMatrix(inverse, bound.quadratic.matrix.batch)
    root = np.sqrt(setting.expectation.spectrum(GRID))
    rng = np.random.default_rng(0)
    sigma = np.sqrt(0.5 / model.encoding.weight)[:, None, None, None]
    total, count = 0.0, 60
    for _ in range(count):
        white = rng.standard_normal((len(unit), *GRID.shape))
        white = np.einsum("zw,swyx->szyx", along, white)
        x = np.fft.ifft2(np.fft.fft2(white) * root).real
        y = operator.apply((x * unit[:, None, None, None]).astype(np.complex64))
        y = y + sigma * rng.standard_normal((*y.shape, 2)).view(complex)[..., 0]
        statistics = accumulate(model, [(slice(0, len(protocol)), y)]).scaled(unit)
        quadratic = type(bound.quadratic)(statistics, real=True)
        total = total + (quadratic.filtered(estimate, quadratic.linear) - x) ** 2
    measured = np.sqrt((total / count).mean(axis=(2, 3))) * unit[:, None]
    np.testing.assert_allclose(bound.standard_error(), measured, rtol=0.05)


def test_without_prior_the_bound_is_least_squares():
    """Against the diagonal of the inverse of a dense normal matrix, for a full raster."""
    grid = Grid((1, 4, 4), (4 * MICRON,) * 3)
    made = apparatus().model_dump(exclude_none=True)
    made["camera"] = {"pixel_um": 4.0, "field_of_view_um": (16.0, 16.0)}
    setting = Experiment(
        type(instrument()).model_validate(made), grid, SPECIES[:1], Expectation((1.0,), 8.0)
    )
    protocol = UniformRandom(shots=16, axes=(1,)).protocol(grid, TIMES)
    bound = Bound.of(setting, protocol).standard_error_without_prior()
    operator = ForwardOperator(setting.model(protocol), np.complex128)
    columns = [
        operator.apply(e.reshape(1, *grid.shape).astype(complex)).ravel() for e in np.eye(16)
    ]
    matrix = np.array(columns).T / (setting.instrument.field_noise)
    normal = 2 * (matrix.conj().T @ matrix).real
    expected = np.sqrt(np.diag(np.linalg.inv(normal)).mean())
    assert bound[0, 0] == pytest.approx(expected, rel=1e-3)


def test_blind_directions_have_an_infinite_bound():
    shots = VariableDensity(shots=3).protocol(GRID, TIMES)
    assert np.isinf(Bound.of(experiment(), shots).standard_error_without_prior()).all()


def test_errors_grow_with_height_and_fall_with_shots():
    few, many = (Bound.of(experiment(), table(n)).standard_error() for n in (20, 200))
    assert (np.diff(few[0]) > 0).all()
    assert (many < few).all()


def test_resolution_blurs_with_height():
    widths = Bound.of(experiment(), table(100)).resolution()
    assert widths.shape == (3, 3)
    assert (widths >= np.array(GRID.voxel) * (1 - 1e-6)).all()
    assert widths[2, 1] >= widths[0, 1]
    assert full_width(np.array([0.0, 1.0, 2.0, 1.0, 0.0]), 2) == pytest.approx(2.0)


CASES = {
    "camera": (
        lambda: experiment(species=SPECIES),
        (Kind(1, 0.0), Kind(1, 2e5), Kind(2, -1e5, (1, -2))),
    ),
    "one detector": (lambda: experiment(True, SPECIES), detector_kinds(GRID, (0.2, 0.4), 4)),
    "coarse pixels": (
        lambda: experiment(pixel_um=8.0),
        (Kind(1, 0.0), Kind(1, 2e5, (3, 1)), Kind(2, -1e5, (1, -2))),
    ),
    "t1": (
        lambda: experiment(species=SPECIES),
        (Kind(1, 0.0, (0, 0), 1e-3), Kind(1, 2e5, (0, 0), 9e-3), Kind(1, 0.0, (0, 0), 4e-3)),
    ),
    "correlated planes": (
        lambda: experiment(pixel_um=8.0, axial=20.0),
        (Kind(1, 0.0, (1, 0)), Kind(1, 2e5)),
    ),
    "t1, one detector": (
        lambda: experiment(True, SPECIES),
        (Kind(1, 0.0, (1, 2), 1e-3), Kind(1, 0.0, (-2, 1), 9e-3), Kind(1, 0.0, (1, 2), 4e-3)),
    ),
    "t1, coarse pixels": (
        lambda: experiment(species=SPECIES, pixel_um=8.0),
        (Kind(1, 0.0, (0, 1), 1e-3), Kind(1, 2e5, (0, 0), 9e-3)),
    ),
}


@pytest.fixture(params=list(CASES))
def searched(request):
    """An information matrix with two shots in it, and sample times."""
    make, kinds = CASES[request.param]
    setting, times = make(), TIMES[:2] if "t1" in request.param else TIMES
    candidates = Candidates.of(GRID, setting.instrument, kinds, Limits(largest_duty_cycle=1.0))
    information = information_of(setting, candidates, times)
    near = np.flatnonzero(np.abs(candidates.steps).max(axis=1) <= 4)
    candidates.allowed[:, np.setdiff1d(np.arange(len(candidates.steps)), near)] = False
    assert candidates.allowed[:, near].all()
    return setting, information, [(0, int(near[5])), (1, int(near[37])), (0, int(near[70]))], times


def test_first_order_scores_are_derivatives(searched):
    """Correlation scores against the exact fall of a very weak shot, for several candidates."""
    _, information, pairs, _ = searched
    for pair in pairs[:2]:
        information.add(pair)
    scores = Scores(information).falls(information)
    tiny, last = 1e-7, len(information.responses.candidates.kinds) - 1
    for pair in (*pairs, (last, pairs[2][1]), (last, pairs[0][1])):
        assert scores[pair] > 0
        assert scores[pair] == pytest.approx(information.fall(pair, tiny) / tiny, rel=2e-3)


def test_exact_fall_is_what_adding_does_and_can_be_undone(searched):
    _, information, pairs, _ = searched
    assert information.criterion() == pytest.approx(1.0)
    before, fall = information.criterion(), information.fall(pairs[0])
    information.add(pairs[0])
    assert before - information.criterion() == pytest.approx(fall, rel=1e-9)
    updated = information.inverse.copy()
    information.set_table(pairs[:1])
    np.testing.assert_allclose(updated, information.inverse, atol=1e-9)
    assert information.fall(pairs[0], -1.0) == pytest.approx(-fall, rel=1e-9)
    information.add(pairs[0], -1.0)
    assert information.criterion() == pytest.approx(1.0)


def test_criterion_of_the_choice_is_that_of_the_bound(searched):
    """The searched variance per depth against the bound of the table as a protocol.

    With shared sample times the choice leaves out the imaginary part of the Gram matrix.
    """
    setting, information, pairs, times = searched
    information.set_table(pairs * 2)
    protocol = information.responses.candidates.protocol(pairs * 2, times)
    error = Bound.of(setting, protocol).standard_error() / 20.0
    shared = information.spectra.components < len(setting.species)
    expected = (error**2).mean(axis=0)
    np.testing.assert_allclose(
        information.depth_variance(), expected, rtol=3e-2 if shared else 2e-4
    )


def test_greedy_with_exchange_meets_the_exhaustive_optimum():
    """All multisets of 3 out of 14 candidates."""
    setting = experiment()
    candidates = Candidates.of(GRID, setting.instrument, camera_kinds())
    keep = np.random.default_rng(3).choice(len(candidates.steps), 14, replace=False)
    candidates.allowed[:] = False
    candidates.allowed[0, keep] = True
    settings = Choice(shortlist=14, exchanges=20)
    chosen = settings.choose(setting, candidates, TIMES, Budget(shots=3))
    information = information_of(setting, candidates, TIMES)

    def value(pairs):
        information.set_table(list(pairs))
        return information.criterion()

    options = [(0, int(place)) for place in keep]
    best = min(value(pairs) for pairs in itertools.combinations_with_replacement(options, 3))
    assert value(chosen.pairs) <= 1.01 * best
    assert chosen.value == pytest.approx(value(chosen.pairs))


def test_chosen_tables_beat_random_ones_and_repeat():
    setting = experiment()
    candidates = Candidates.of(GRID, setting.instrument, camera_kinds((1,), (-0.2, 0.0, 0.2)))
    chosen = Choice().choose(setting, candidates, TIMES, Budget(shots=16))
    again = Choice().choose(setting, candidates, TIMES, Budget(shots=16))
    assert chosen.protocol.digest() == again.protocol.digest()
    ours = (Bound.of(setting, chosen.protocol).standard_error() ** 2).mean()
    for kind in (UniformRandom, VariableDensity):
        made = kind(shots=16, axial_bound_rad_per_um=0.2).protocol(GRID, TIMES)
        assert ours < 0.95 * (Bound.of(setting, made).standard_error() ** 2).mean()


def test_relaxed_bound_lies_below_the_table():
    setting = experiment()
    candidates = Candidates.of(GRID, setting.instrument, camera_kinds())
    chosen = Choice().choose(setting, candidates, TIMES, Budget(shots=12))
    information = information_of(setting, candidates, TIMES)
    found = lower_bound(information, chosen.pairs, 15)
    assert found.lower_bound <= found.table
    assert 0 <= found.gap < 0.2


def test_worst_error_lowers_the_worst_depth():
    setting = experiment()
    candidates = Candidates.of(GRID, setting.instrument, camera_kinds((1,), (-0.2, 0.0, 0.2)))
    by = {}
    for criterion in (MeanError(), WorstError(12.0), MeanError((1.0, 0.0, 0.0))):
        chosen = Choice(criterion).choose(setting, candidates, TIMES, Budget(shots=10))
        by[criterion] = Bound.of(setting, chosen.protocol).standard_error()[0]
    mean, worst, lowest = by.values()
    assert worst.max() <= mean.max()
    assert lowest[0] <= mean[0]


def test_budget_in_seconds_counts_gradient_pulses():
    setting = experiment()
    limits = Limits(base_duration_s=0.5)
    candidates = Candidates.of(GRID, setting.instrument, camera_kinds(), limits)
    chosen = Choice().choose(setting, candidates, TIMES, Budget(seconds=5.2))
    spent = sum(candidates.seconds[pair] for pair in chosen.pairs)
    assert spent <= 5.2
    assert len(chosen.pairs) == 10


def test_limits_by_hand():
    """k = γ G t with ramps: 1 T/m, 4 ms, 1e4 T/m/s."""
    limits, made = Limits(slew_T_per_m_s=1e4), instrument()
    gamma = 2.6752218708e8  # rad/(s T), CODATA 2018
    k = np.array([gamma * 1.0 * 2e-3, 0.0, 0.0])
    assert limits.pulse_time(made, k) == pytest.approx(2e-3 + 1e-4)
    tiny = np.array([gamma * 1e-5, 0.0, 0.0])
    assert limits.pulse_time(made, tiny) == pytest.approx(2 * np.sqrt(1e-5 / 1e4))
    far = np.array([gamma * 5e-3, 0.0, 0.0])
    assert not limits.allowed(made, far, np.zeros(2))
    assert Limits(1e-2, largest_duty_cycle=0.05).allowed(made, k, np.zeros(2)) == np.False_


def test_trains_by_hand():
    """Ernst's angle; equal signals of the growing-angle train; noise of the ancilla readout."""
    signal, clock = Thermal(t1_s=1.0).amplitudes(3, 1.0)
    left = np.exp(-1.0)
    assert signal[0] == pytest.approx(np.sqrt((1 - left) / (1 + left)))
    assert clock.tolist() == [0.0, 1.0, 2.0]
    signal, clock = Hyperpolarised(t1_s=1e9, per_fill=4, fill_time_s=60.0).amplitudes(6, 2.0)
    np.testing.assert_allclose(signal, 0.5, rtol=1e-6)
    assert clock[4] - clock[3] == pytest.approx(62.0)
    assert AncillaReadout(30.0, 0.0).noise_gain(20e-6) == pytest.approx(30.0)
    assert AncillaReadout(30.0, 160.0).noise_gain(20e-6) == pytest.approx(10.0)


def test_a_train_spends_the_magnetisation():
    """A fill of 4 gives each shot half the signal; averages count as shots of the train."""
    protocol = replace(table(6), averages=np.array([1, 1, 2, 1, 1, 1]))
    spent = in_train(protocol, Hyperpolarised(1e9, 4, 60.0), 1.0)
    np.testing.assert_allclose(np.abs(spent.amplitude), 0.5, rtol=1e-6)
    assert spent.clock_time[3] - spent.clock_time[0] == pytest.approx(64.0)
    full, half = (Bound.of(experiment(), p).standard_error() for p in (protocol, spent))
    assert (half > full).all()


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: Expectation((0.0,)), "positive"),
        (lambda: Experiment(apparatus(), GRID, SPECIES, Expectation((1.0,))), "1 spreads for 2"),
        (lambda: Candidates.of(GRID, apparatus(), ()), "no kinds"),
        (lambda: Candidates.of(GRID, apparatus(), (Kind(1, 1e9),)), "reach none"),
        (lambda: Budget(), "shots or seconds"),
        (lambda: Limits(0.0), "positive"),
        (lambda: Thermal(0.0), "positive"),
    ],
)
def test_refusals_are_one_line(make, says):
    with pytest.raises(InputError, match=says) as caught:
        make()
    assert "\n" not in str(caught.value)
